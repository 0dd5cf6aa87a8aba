"""The ledger: tables, claims, exclusions, and every way its file can be unusable."""

import json
import os
import re
import sqlite3
import time
from contextlib import closing
from dataclasses import fields, replace
from pathlib import Path

import numpy as np
import pytest
from night_fits import make_folder, plain

import scatterfit
from scatterfit.errors import ScatterfitError
from scatterfit.measured_pulse.record import (
    Alternative,
    BudgetLine,
    Curve,
    Extremum,
    Learnt,
    NucleationConditions,
    Quantity,
)
from scatterfit.overnight import ledger_file, owner
from scatterfit.overnight.columns import COLUMNS, NUMBERS, flat_row
from scatterfit.overnight.jobs import Job
from scatterfit.overnight.ledger import Ledger
from scatterfit.overnight.ledger_file import LedgerError
from scatterfit.overnight.pulse_table import pulse_table
from scatterfit.overnight.restore import pulse_from
from scatterfit.overnight.results import open_results
from scatterfit.overnight.schema import ADDED, VERSION, VIEW
from scatterfit.overnight.shares import is_network_kind, kind_of_mount
from scatterfit.overnight.thin import channels_from, thinned
from scatterfit.overnight.work import measure
from scatterfit.report.page import write_page

DOCS = Path(__file__).resolve().parents[1] / "docs"


@pytest.fixture
def night(tmp_path):
    """Return a plan and an open ledger in which three pulses are queued."""
    plan = make_folder(tmp_path, 3)
    with closing(Ledger(tmp_path / "night.sqlite")) as ledger:
        queue(ledger, "p000.csv", "p001.csv", "p002.csv")
        yield plan, ledger


def queue(ledger, *names):
    with ledger.writing():
        for name in names:
            ledger.put(Job(name), "new")


def fill(plan, ledger):
    """Fit what is queued, in this process."""
    ledger.store([measure(plan, job) for job in ledger.claim(100)])


def assert_one_line(error, *words):
    text = str(error.value)
    assert "\n" not in text
    assert isinstance(error.value, ScatterfitError)
    for word in words:
        assert word in text


def test_a_stored_pulse_comes_back_as_it_was_fitted(night):
    plan, ledger = night
    fill(plan, ledger)
    results = open_results(ledger.path)
    fitted = plain(plan.chamber, plan.folder / "p001.csv", folder=plan.folder)
    stored = results.pulse("p001.csv")
    assert len(results) == len(list(results)) == 3
    assert stored.final_radius == fitted.final_radius
    assert stored.to_dict() == fitted.to_dict() | {"trace": "p001.csv"}
    np.testing.assert_allclose(stored.channels[0].signal, fitted.channels[0].signal, rtol=1e-5)


def test_the_result_of_a_full_record_survives_the_ledger():
    before = replace(
        plain("", _some_trace(), folder=None), birth_time=Quantity(8e-3, 1e-5), optical_depth=0.01,
        upper_limit=5e5, radius_spread=Quantity(0.02, 1e-4), growth_rate=Quantity(2e-5, 1e-8),
        area_rate=Quantity(4e-11, 1e-14), droplet_temperature=Quantity(272.0, 0.1),
        concentration_by={"gain": Quantity(1e9, 1e7), "transmission": None, "depletion": None},
        growth_saturation_ratio=Quantity(1.5, 0.01), growth_temperature=Quantity(269.0, 0.2),
        nucleation=NucleationConditions(
            Quantity(243.0, 0.2), Quantity(54e3, 10.0), Quantity(10.0, 0.1), Quantity(1e-3, 1e-5),
            Quantity(4e12, 1e11), -0.01),
        curve=Curve(np.arange(3.0), np.arange(3.0) * 1e-6, np.ones(3) * 1e-9),
        extrema=(Extremum(0.02, 1e-6, "maximum", "scatter1_V"),),
        alternatives=(Alternative(1.2e-6, None, 30.0), Alternative(1.4e-6, 2e9, 40.0)),
        budget=(BudgetLine("gain", "concentration_per_cm3", 5.0, 0.9),),
        learnt=(Learnt("chamber.path_mm", -0.4, 0.3),), trials=50,
        monte_carlo={"final_radius": Quantity(1e-6, 1e-9), "concentration": Quantity(1e9, 1e7),
                     "nucleation_rate": None},
    )
    for field in fields(before):  # a new field must be restored, and tried here, too
        assert getattr(before, field.name) not in (None, (), 0), field.name
    restored = pulse_from(before.to_dict(), thinned(before.channels))
    assert _rounded(restored.to_dict()) == _rounded(before.to_dict())
    assert restored.channels[0].label == before.channels[0].label


def _some_trace():
    path = Path(os.environ["SCATTERFIT_CACHE"]) / "some.csv"
    if not path.exists():
        make_folder(path.parent / "some", 1)
        path.write_bytes((path.parent / "some" / "night" / "p000.csv").read_bytes())
    return path


def _rounded(value):
    """Return a result with its numbers at twelve digits, for conversions to SI and back."""
    if isinstance(value, dict):
        return {key: _rounded(part) for key, part in value.items()}
    if isinstance(value, list):
        return [_rounded(part) for part in value]
    return float(f"{value:.12g}") if isinstance(value, float) else value


def test_the_flat_row_has_every_scalar_of_a_result():
    result = plain("", _some_trace()).to_dict()
    row = flat_row(result)
    scalars = {key for key, value in result.items() if value is None or isinstance(value, float)}
    scalars -= {"monte_carlo"}  # a mapping, where it was asked for
    assert scalars <= row.keys()
    assert {"nucleation_" + key for key in result["nucleation"]} <= row.keys()
    assert {f"concentration_by_{key}_per_cm3" for key in result["concentration_by"]} <= row.keys()
    assert row["reasons"] == "caution;second"
    assert row["concentration_per_cm3_sigma_statistical"] == 8.0


def test_every_column_of_numbers_has_a_unit_and_a_meaning():
    for name, (unit, meaning) in NUMBERS.items():
        assert unit, name
        assert meaning, name
    # The unit stands in the name as well; what has none is a pure number.
    endings = {"um": "_um", "ms": "_ms", "K": "_K", "kPa": "_kPa", "nm": "_nm", "cm-3": "_per_cm3",
               "cm-3 s-1": "_per_cm3_s", "um s-1": "_um_per_s", "um2 s-1": "_um2_per_s",
               "percent": "_percent"}
    for column in COLUMNS:
        assert column.unit == "1" or column.name.endswith(endings[column.unit])


def test_thinned_channels_are_samples_as_measured():
    view = plain("", _some_trace()).channels[0]
    [kept] = thinned([view], points=10)
    assert len(kept["time_ms"]) <= 10
    again = channels_from([kept])[0]
    places = np.searchsorted(view.time, again.time - 1e-9)
    np.testing.assert_allclose(again.signal, view.signal[places])
    assert kept["every"] == 4


def test_the_schema_is_documented(night):
    _, ledger = night
    text = (DOCS / "ledger.md").read_text(encoding="utf-8")
    rows = ledger.connection.execute(
        "SELECT m.name, p.name FROM sqlite_master AS m JOIN pragma_table_info(m.name) AS p "
        "WHERE m.type IN ('table', 'view')").fetchall()
    assert len(rows) > 60
    for table, column in rows:
        assert f"`{table}`" in text
        assert f"`{column}`" in text, f"{table}.{column}"
    assert f"version {VERSION}" in text


def test_any_tool_reads_while_a_result_is_being_written(night):
    plan, ledger = night
    fill(plan, ledger)
    with closing(sqlite3.connect(ledger.path, timeout=0.1)) as other, ledger.writing():
        ledger.connection.execute("DELETE FROM pulses")
        assert other.execute("SELECT count(*) FROM pulses").fetchone()[0] == 3
        assert len(open_results(ledger.path)) == 3


def test_what_is_left_is_one_plain_file(tmp_path):
    path = tmp_path / "night.sqlite"
    with closing(Ledger(path)) as ledger:
        queue(ledger, "a.csv")
    assert sorted(file.name for file in tmp_path.iterdir()) == ["night.sqlite"]
    with closing(sqlite3.connect(path)) as other:
        assert other.execute("PRAGMA journal_mode").fetchone()[0] == "delete"


def test_two_processes_never_hold_the_same_job(night):
    _, first = night
    with closing(Ledger(first.path)) as second:
        one = [job.trace for job in first.claim(2)]
        two = [job.trace for job in second.claim(5)]
        assert one == ["p000.csv", "p001.csv"]
        assert two == ["p002.csv"]
        assert first.waiting() == (0, 1)
        assert second.waiting() == (0, 2)
        first.release(["p001.csv"])
        assert [job.trace for job in second.claim(5)] == ["p001.csv"]


def test_only_the_holder_of_a_claim_stores_a_result(night):
    plan, first = night
    outcomes = [measure(plan, job) for job in first.claim(3)]
    with first.writing():  # as if this process had slept through its lease
        first.connection.execute(
            "UPDATE queue SET claimed_until = 1 WHERE trace = 'p000.csv'")
    with closing(Ledger(first.path)) as second:
        taken = second.claim(1)
        assert [outcome.job.trace for outcome in first.store(outcomes)] == ["p001.csv", "p002.csv"]
        assert len(open_results(first.path)) == 2
        assert len(second.store([measure(plan, taken[0])])) == 1
    assert len(open_results(first.path)) == 3


def test_a_claim_that_is_renewed_lasts(night):
    _, ledger = night
    ledger.claim(1)
    with ledger.writing():
        ledger.connection.execute("UPDATE queue SET claimed_until = ? WHERE claimed_by NOT NULL",
                                  (time.time() + 1,))
    ledger.renew()
    until = ledger.connection.execute("SELECT max(claimed_until) FROM queue").fetchone()[0]
    assert until > time.time() + 30


def test_closing_gives_claims_back(night):
    _, first = night
    with closing(Ledger(first.path)) as second:
        assert len(second.claim(3)) == 3
    assert len(first.claim(3)) == 3


# Elsewhere the start of a process is not told apart, and a claim runs out by its lease alone.
@pytest.mark.skipif(not Path("/proc/self/stat").exists(), reason="no /proc here")
def test_a_claim_of_a_process_that_is_gone_is_free_at_once(night):
    _, ledger = night
    me = owner.this_owner()
    machine, pid, start, _ = me.split("|")
    assert not owner.is_gone(me)
    assert owner.is_gone(f"{machine}|{pid}|{int(start) - 1}|x")  # its number was given again
    assert not owner.is_gone(f"elsewhere/{machine}|{pid}|{int(start) - 1}|x")
    with ledger.writing():
        ledger.connection.execute(
            "UPDATE queue SET claimed_by = ?, claimed_until = ?",
            (f"{machine}|{pid}|{int(start) - 1}|x", time.time() + 1000))
    assert len(ledger.claim(3)) == 3


def test_exclusion_by_hand_is_kept_with_author_and_note(night):
    plan, ledger = night
    fill(plan, ledger)
    for author, note in (("", "fogged"), ("ann", " ")):
        with pytest.raises(LedgerError, match="author and a note"):
            ledger.exclude("p001.csv", author, note)
    with pytest.raises(LedgerError, match="no pulse p9"):
        ledger.exclude("p9", "ann", "fogged")
    ledger.exclude("p001.csv", "ann", "window fogged")
    left = open_results(ledger.path)
    assert len(left) == 2
    assert "p001.csv" not in [row["trace"] for row in left.rows()]
    assert "p001.csv" not in [pulse.trace for pulse in left]
    rows = {row["trace"]: row for row in open_results(ledger.path, excluded=True).rows()}
    assert (rows["p001.csv"]["excluded"], rows["p001.csv"]["excluded_by"]) == (1, "ann")
    assert rows["p001.csv"]["excluded_note"] == "window fogged"
    assert rows["p000.csv"]["excluded"] == 0


def test_exclusion_survives_a_new_fit_and_can_be_undone(night):
    plan, ledger = night
    fill(plan, ledger)
    ledger.exclude("p001.csv", "ann", "window fogged")
    queue(ledger, "p001.csv")
    fill(plan, ledger)
    assert len(open_results(ledger.path)) == 2
    ledger.exclude("p001.csv", "bob", "it was another pulse", excluded=False)
    results = open_results(ledger.path)
    assert len(results) == 3
    assert [entry["author"] for entry in results.exclusions()] == ["ann", "bob"]


def test_a_pulse_is_found_by_the_end_of_its_name(night):
    plan, ledger = night
    fill(plan, ledger)
    with ledger.writing():
        for number, name in enumerate(("a/x.csv", "b/x.csv", "b/y.csv")):
            ledger.connection.execute("UPDATE pulses SET trace = ? WHERE trace = ?",
                                      (name, f"p{number:03d}.csv"))
    results = open_results(ledger.path)
    assert results.name_of("y") == results.name_of("y.csv") == results.name_of("b/y") == "b/y.csv"
    assert results.name_of("a/x.csv") == "a/x.csv"
    with pytest.raises(LedgerError, match="several pulses have that name: a/x"):
        results.name_of("x")
    with pytest.raises(LedgerError, match="did you mean b/y"):
        results.name_of("b/yy.csv")


def test_the_table_has_a_column_for_each_override(night):
    plan, ledger = night
    (plan.folder / "pulses.csv").write_text("trace,chamber.temperature_K\np001.csv,297.5\n",
                                            encoding="utf-8")
    changed = replace(plan, fit=_with_overrides)
    fill(changed, ledger)
    rows = {row["trace"]: row for row in open_results(ledger.path).rows()}
    assert rows["p001.csv"]["chamber.temperature_K"] == 297.5
    assert rows["p000.csv"]["chamber.temperature_K"] is None


def _with_overrides(chamber, trace, *, overrides, folder):
    from scatterfit.files_pulses import pulse_rows

    rows = pulse_rows(trace, folder).values()
    return plain(chamber, trace, overrides=overrides | next(iter(rows), {}), folder=folder)


def test_seeds_of_the_chamber_file_and_of_the_pulse_are_in_the_row(night):
    plan, ledger = night
    with plan.chamber.open("a", encoding="utf-8") as file:
        file.write("\n[seed]\nconcentration_per_cm3 = 800\nconcentration_per_cm3_sigma = 40\n")
    fill(replace(plan, overrides={"seed.diameter_nm": 80.0}), ledger)
    row = next(open_results(ledger.path).rows())
    assert row["seed_concentration_per_cm3"] == 800
    assert row["seed_concentration_per_cm3_sigma"] == 40
    assert row["seed_diameter_nm"] == 80


def test_a_table_is_a_data_frame_where_pandas_is_installed(night):
    pandas = pytest.importorskip("pandas", reason="pandas is not installed")
    plan, ledger = night
    fill(plan, ledger)
    table = scatterfit.open_results(ledger.path).table()
    assert isinstance(table, pandas.DataFrame)
    assert table.shape == (3, len(open_results(ledger.path).columns()))
    assert table["final_radius_um"].between(1, 2).all()


def as_version_1(path):
    """Take from a ledger what version 1 had not."""
    with closing(sqlite3.connect(path)) as connection:
        connection.execute("DROP VIEW night")
        for name in ADDED:
            connection.execute(f'ALTER TABLE pulses DROP COLUMN "{name}"')
        connection.execute(VIEW)
        connection.execute("PRAGMA user_version = 1")
        connection.commit()


def test_a_ledger_of_version_1_is_read_and_brought_up(night):
    plan, ledger = night
    fill(plan, ledger)
    ledger.close()
    as_version_1(ledger.path)
    rows = list(open_results(ledger.path).rows())
    assert len(rows) == 3
    assert all(row["start_temperature_K"] is None for row in rows)
    write_page(ledger.path, ledger.path.with_name("page.html"))
    assert len(pulse_table(ledger.path)[0].names) == 3
    with closing(Ledger(ledger.path)) as again:
        queue(again, "p000.csv", "p001.csv", "p002.csv")
        fill(plan, again)
    for row in open_results(ledger.path).rows():
        assert row["start_temperature_K"] == 296.15


def test_a_ledger_of_a_newer_version_is_refused(tmp_path):
    path = tmp_path / "night.sqlite"
    Ledger(path).close()
    with closing(sqlite3.connect(path)) as connection:
        connection.execute(f"PRAGMA user_version = {VERSION + 1}")
    for use in (Ledger, open_results):
        with pytest.raises(LedgerError) as error:
            use(path)
        assert_one_line(error, "newer scatterfit", str(VERSION + 1), "update")


def test_files_that_are_no_ledger_are_refused(tmp_path):
    text, other = tmp_path / "notes.txt", tmp_path / "other.sqlite"
    text.write_text("not a database, but long enough to be looked at " * 20, encoding="utf-8")
    with closing(sqlite3.connect(other)) as connection:
        connection.execute("CREATE TABLE mine (x)")
    before = other.read_bytes(), text.read_bytes()
    for use in (Ledger, open_results):
        for path in (text, other):
            with pytest.raises(LedgerError) as error:
                use(path)
            assert_one_line(error, str(path), "not a ledger", "choose another")
        with pytest.raises(LedgerError) as error:
            use(tmp_path)
        assert_one_line(error, "is a folder")
    assert (other.read_bytes(), text.read_bytes()) == before


def test_a_ledger_that_is_not_there(tmp_path):
    with pytest.raises(LedgerError) as error:
        open_results(tmp_path / "absent.sqlite")
    assert_one_line(error, "no such ledger", "scatterfit batch")
    assert not (tmp_path / "absent.sqlite").exists()


def test_a_folder_that_cannot_be_written(tmp_path):
    if os.geteuid() == 0:
        place = Path("/proc/self/night.sqlite")  # not even the superuser may write there
        if not place.parent.exists():
            pytest.skip("the superuser may write everywhere, and there is no /proc")
    else:
        tmp_path.chmod(0o500)
        place = tmp_path / "night.sqlite"
    with pytest.raises(LedgerError) as error:
        Ledger(place)
    assert_one_line(error, str(place), "cannot be opened or made")


def test_a_full_disk_is_one_line_and_loses_nothing(night):
    plan, ledger = night
    ledger.store([measure(plan, job) for job in ledger.claim(1)])
    pages = ledger.connection.execute("PRAGMA page_count").fetchone()[0]
    ledger.connection.execute(f"PRAGMA max_page_count = {pages}")  # SQLite's own full disk
    big = [replace(measure(plan, job), thinned=json.dumps(["x" * 500_000]))
           for job in ledger.claim(2)]
    with pytest.raises(LedgerError) as error:
        ledger.store(big)
    assert_one_line(error, "disk is full", "what was stored is safe", "same command")
    assert [row["trace"] for row in open_results(ledger.path).rows()] == ["p000.csv"]
    ledger.connection.execute("PRAGMA max_page_count = 1000000")
    assert len(ledger.store(big)) == 2


def test_a_damaged_file_is_one_line(night):
    plan, ledger = night
    fill(plan, ledger)
    ledger.close()
    with ledger.path.open("r+b") as file:
        file.seek(4096)
        file.write(b"\xff" * 30000)
    with pytest.raises(LedgerError) as error:
        list(open_results(ledger.path).rows())
    assert_one_line(error, "damaged")


def test_a_network_share_gets_the_journal_that_works_there(tmp_path, monkeypatch):
    monkeypatch.setattr(ledger_file, "on_network_share", lambda _path: True)
    with closing(Ledger(tmp_path / "night.sqlite")) as ledger:
        mode = ledger.connection.execute("PRAGMA journal_mode").fetchone()[0]
        queue(ledger, "a.csv")
        assert len(ledger.claim(1)) == 1
    assert mode == "delete"


@pytest.mark.parametrize(("path", "kind"), [
    ("/lab/night/a.sqlite", "nfs4"), ("/lab", "nfs4"), ("/laboratory", "ext4"),
    ("/mnt/my disk/x", "cifs"), ("/mnt/my", "ext4"), ("/data/x", "ext4"), ("/ram/x", "tmpfs"),
])
def test_kind_of_file_system_is_that_of_the_nearest_mount(path, kind):
    mounts = "\n".join([
        "21 1 8:1 / / rw,relatime - ext4 /dev/sda1 rw",
        "30 21 0:35 / /lab rw,relatime shared:9 master:1 - nfs4 box:/lab rw",
        r"31 21 0:36 / /mnt/my\040disk rw - cifs //box/share rw",
        "32 21 8:2 / /ram rw - ext4 /dev/sdb rw", "33 32 0:40 / /ram rw - tmpfs tmpfs rw",
        "nonsense",
    ])
    assert kind_of_mount(mounts, path) == kind
    assert is_network_kind(kind) == (kind in {"nfs4", "cifs"})


def test_times_are_written_as_any_tool_reads_them(night):
    plan, ledger = night
    os.utime(plan.folder / "p000.csv", ns=(1_700_000_000_250_000_000,) * 2)
    fill(plan, ledger)
    row = next(open_results(ledger.path).rows())
    assert row["recorded_utc"] == "2023-11-14T22:13:20.250Z"  # 1.7e9 s after 1970, well known
    assert re.fullmatch(r"\d{4}-\d\d-\d\dT[\d:]{8}\.\d{3}Z", row["fitted_utc"])
