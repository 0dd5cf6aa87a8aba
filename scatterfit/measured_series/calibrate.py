"""From many pulses of one bench to the bench: looks, joint estimate, and what it rests on."""

from dataclasses import replace
from functools import partial

import numpy as np

from scatterfit.errors import InvalidInputError
from scatterfit.measured_series.answer import answer
from scatterfit.measured_series.choice import before_of, sigmas_of, unknowns_of
from scatterfit.measured_series.drift import gain_drift
from scatterfit.measured_series.informed import (
    accommodation_notes,
    informed_by,
    not_separated,
)
from scatterfit.measured_series.joint import joint_estimate, weighed
from scatterfit.measured_series.look import (
    Look,
    first_look,
    second_look,
    starting_gain,
    with_gains,
)
from scatterfit.measured_series.record import Calibration, Row, Shared, in_unit, unit_of
from scatterfit.measured_series.unknowns import kind_of

_OUTLYING = 4.0
_LOOSE = 8.0
_LOOSE_ROUNDS = 5
_POOR = 0.5
_FOREIGN = 0.1
_GAIN_APART = 4.0
_STRANGER_ROUNDS = 3
_UNCLEAR = {"not-described", "ambiguous-lobe"}


def calibrate(apparatus, pulses, choice, settings):
    """Return what the pulses of a series say about what they share.

    Parameters
    ----------
    apparatus : Apparatus
        The bench as stated.
    pulses : sequence of SeriesPulse
        Pulses, in order.
    choice : Choice
        What is shared.
    settings : dict
        As for :func:`joint_estimate`, with ``"places"``: name to place on the axis of the drift,
        and ``"axis"``: what it counts.

    Returns
    -------
    calibration : Calibration
        Values, covariance, drift, and a row for each pulse.
    joint : Joint
        The estimate behind it.

    Raises
    ------
    InvalidInputError
        If no pulse can be used, none says anything of what is to be learnt, or half of them are
        not described by any one bench.
    """
    free = sigmas_of(apparatus, choice)
    looks = list(settings["map"](partial(first_look, free=free, store=settings["store"]), pulses))
    warms = [look.warm for look in looks if look.warm is not None]
    if not warms:
        raise InvalidInputError(_none_left(looks))
    gains, notes = _gains(apparatus, choice, warms)
    unknowns = unknowns_of(apparatus, choice, warms, gains)
    if all(u.key not in choice.keys for u in unknowns):
        message = f"nothing can be learnt from these pulses: {'; '.join(notes)}"
        raise InvalidInputError(message)
    start = _start(unknowns, warms, gains)
    warms = [_at_start(w, unknowns, start) for w in warms]
    before = before_of(apparatus, unknowns)
    # Held to one growth law at a bench that is still off, pulses would fall into wrong lobes.
    joint = joint_estimate(warms, unknowns, start, before,
                           settings | {"loose": _LOOSE, "rounds": _LOOSE_ROUNDS})
    warms = _from_there(warms, joint)
    joint = joint_estimate(warms, unknowns, joint.x, before, settings)
    looks, joint = _once_more((pulses, looks, warms), (unknowns, before, free), joint, settings)
    looks, joint = _without_strangers(looks, joint, (unknowns, before), settings)
    return _calibration(joint, unknowns, (looks, choice, notes), settings), joint


def _from_there(warms, joint):
    """Return pulses that start with the clouds of an estimate."""
    clouds = {answer.name: answer.cloud for answer in joint.answers}
    return [replace(warm, cloud=clouds[warm.name]) for warm in warms]


def _once_more(series, known, joint, settings):
    """Return looks and joint estimate with pulses that the joint bench makes clear."""
    pulses, looks, warms = series
    unknowns, before, free = known
    again = [pulse for pulse, look in zip(pulses, looks, strict=True) if look.code in _UNCLEAR]
    if not again:
        return looks, joint
    sigma = np.sqrt(np.diag(joint.covariance))
    ask = partial(second_look, free=free, store=settings["store"],
                  known=tuple(zip(unknowns, joint.x, sigma, strict=True)))
    found = {look.name: look for look in settings["map"](ask, again)}
    looks = [found.get(look.name, look) for look in looks]
    found = {name: look for name, look in found.items() if look.warm is not None}
    if not found:
        return looks, joint
    warms = _from_there(warms, joint)
    warms += [_at_start(look.warm, unknowns, joint.x) for look in found.values()]
    order = {pulse.name: i for i, pulse in enumerate(pulses)}
    warms.sort(key=lambda warm: order[warm.name])
    return looks, joint_estimate(warms, unknowns, joint.x, before, settings)


def _without_strangers(looks, joint, known, settings):
    """Return looks and joint estimate without pulses whose light no common bench describes.

    Such a pulse was described on its own: at the common bench it has been pulled to where its
    numbers mean nothing, and has pulled the bench along.
    """
    unknowns, before = known
    for _ in range(_STRANGER_ROUNDS):
        strange = {a.name: a for a in joint.answers if max(a.left.values()) > _FOREIGN}
        if not strange:
            break
        if 2 * len(strange) >= len(joint.answers) and len(joint.answers) > 1:
            raise InvalidInputError(_no_common_bench(strange, joint, unknowns, looks))
        warms = [_at_start(look.warm, unknowns, joint.x) for look in looks
                 if look.warm is not None and look.name not in strange]
        if not warms:
            break
        looks = [Look(look.name, None, "another-bench", _foreign(strange[look.name], look, (
            unknowns, joint))) if look.name in strange else look for look in looks]
        joint = joint_estimate(_from_there(warms, joint), unknowns, joint.x, before, settings)
    return looks, joint


def _foreign(answer, look, known):
    """Return what is odd about a pulse that the common bench does not describe."""
    column = max(answer.left, key=answer.left.get)
    text = (f"described on its own, but at the bench of the others {answer.left[column]:.0%} of "
            f"{column} stay unexplained")
    unknowns, joint = known
    for unknown, x in zip(unknowns, joint.x, strict=True):
        own = look.warm.gains.get(unknown.key.split(".")[1]) if (
            unknown.key.endswith(".gain_V_m")) else None
        if own is None:
            continue
        apart = own[0] - float(np.log(unknown.at(x)))
        if abs(apart) > _GAIN_APART * own[1]:
            text += (f"; its own {unknown.key} would be {np.exp(apart):.3g} times theirs: state it "
                     "for this pulse, or --hold it")
    return text


def _no_common_bench(strange, joint, unknowns, looks):
    """Return the message where most pulses do not share a bench."""
    named = [f"{look.name}: {_foreign(strange[look.name], look, (unknowns, joint))}"
             for look in looks if look.name in strange]
    more = f"; and {len(named) - 2} more" if len(named) > 2 else ""
    return (f"{len(strange)} of {len(joint.answers)} pulses do not share one bench, nothing is "
            f"written: {'; '.join(named[:2])}{more}")


def _none_left(looks):
    """Return the message where no pulse can be used."""
    if not looks:
        return "no pulse to learn from"
    reasons = [f"{look.name}: {look.text}" for look in looks[:3]]
    more = f" and {len(looks) - 3} more" if len(looks) > 3 else ""
    return f"none of {len(looks)} pulses can be used: {'; '.join(reasons)}{more}"


def _gains(apparatus, choice, warms):
    """Return where gains start, by key, and notes on those that nothing fixes."""
    gains, notes = {}, []
    for detector in apparatus.detectors:
        key = f"detector.{detector.column}.gain_V_m"
        if key not in choice.keys:
            continue
        gain = starting_gain(warms, detector.column)
        if gain is None and detector.gain is None:
            notes.append(
                f"{key}: no pulse fixes its own number; a transmission with its path, or pulses "
                "thick enough to deplete the vapour, would give it")
        elif detector.gain is None:
            gains[key] = gain
        else:
            gains[key] = detector.gain
    return gains, notes


def _start(unknowns, warms, gains):
    """Return where the joint estimate starts: what most pulses would have on their own."""
    start = []
    for unknown in unknowns:
        own = [w.own[unknown.key] for w in warms if unknown.key in w.own]
        middle = float(np.median(own)) if own else 0.0
        if unknown.key in gains:
            column = unknown.key.split(".")[1]
            found = starting_gain(warms, column)
            middle = 0.0 if found is None else float(np.log(found / unknown.value))
            if unknown.stated:
                middle = float(np.clip(middle, -2.0 * unknown.sigma, 2.0 * unknown.sigma))
        start.append(middle)
    return np.array(start)


def _at_start(warm, unknowns, start):
    """Return a pulse whose number is that of the gains to start from."""
    there = {u.key.split(".")[1]: u.at(x) for u, x in zip(unknowns, start, strict=True)
             if u.key.endswith(".gain_V_m")}
    stated = {u.key.split(".")[1]: u.value for u in unknowns if u.key.endswith(".gain_V_m")}
    bench = warm.apparatus
    warm = with_gains(warm, there)
    # The bench itself stays as stated: coordinates count from there.
    keep = tuple(
        replace(d, gain=_own_gain(bench, d.column, stated.get(d.column)))
        for d in warm.apparatus.detectors
    )
    return replace(warm, apparatus=replace(warm.apparatus, detectors=keep))


def _own_gain(bench, column, stated):
    """Return a pulse's own gain, or what the series starts from."""
    own = next(d.gain for d in bench.detectors if d.column == column)
    return stated if own is None else own


def _calibration(joint, unknowns, inputs, settings):
    """Return the record of a joint estimate."""
    looks, choice, notes = inputs
    sigma = np.sqrt(np.diag(joint.covariance))
    before = np.sqrt(np.diag(joint.before))
    informed = informed_by(joint, unknowns)
    shared = []
    for k, unknown in enumerate(unknowns):
        x = float(joint.x[k])
        shared.append(Shared(
            unknown.key, unknown.label, unit_of(unknown.key),
            in_unit(unknown.key, unknown.value),
            in_unit(unknown.key, unknown.sigma_at(0.0, before[k])), unknown.stated,
            in_unit(unknown.key, _possible(unknown, x)),
            in_unit(unknown.key, unknown.sigma_at(x, sigma[k])),
            x / float(before[k]), float(sigma[k] / before[k]), unknown.written, informed[k],
        ))
    written = [k for k, u in enumerate(unknowns) if u.written]
    sign = np.array([-1.0 if unknowns[k].kind.way == "inverse" else 1.0 for k in written])
    scaled = sign * sigma[written]
    correlation = joint.covariance[np.ix_(written, written)] / np.outer(scaled, scaled)
    np.fill_diagonal(correlation, 1.0)
    return Calibration(
        tuple(shared), tuple(unknowns[k].key for k in written), correlation,
        not_separated(joint, unknowns), _rows(joint, unknowns, looks, settings),
        gain_drift(joint, unknowns, settings["places"]), choice.held, joint.scatter,
        joint.rounds, joint.converged, (*notes, *_notes(joint, unknowns)), settings["axis"],
    )


def _possible(unknown, x):
    """Return the value, an accommodation coefficient at most one."""
    value = unknown.at(x)
    return min(value, 1.0) if unknown.kind.way == "inverse" else value


def _notes(joint, unknowns):
    """Return what a user should know of the estimate as a whole."""
    notes = accommodation_notes(joint, unknowns)
    if not joint.converged:
        notes.append("the joint estimate had not settled when it was stopped: give it again with "
                     "the chamber file it wrote, or hold what is least sure")
    if len(joint.answers) == 1:
        notes.append("one pulse alone: nothing tells the bench's errors from the pulse's own")
    if joint.scatter > 1.5:
        notes.append(
            f"pulses scatter {joint.scatter:.1f} times as much about the joint bench as their "
            "noise would make them; sigmas are widened by that factor. What is held, or is not in "
            "the model, varies from pulse to pulse")
    for k, unknown in enumerate(unknowns):
        if kind_of(unknown.key).way == "inverse" and unknown.at(joint.x[k]) > 1.0:
            notes.append(f"{unknown.key}: the pulses would have it above one; one is written")
    return notes


def _rows(joint, unknowns, looks, settings):
    """Return a row for each pulse, in the order of the series."""
    place = {found.name: i for i, found in enumerate(joint.answers)}
    aside = [_at_start(look.aside, unknowns, joint.x) for look in looks if look.aside is not None]
    ask = partial(answer, unknowns=unknowns, x=joint.x, store=settings["store"])
    beside = {found.name: found for found in settings["map"](ask, aside)}
    rows = []
    for look in looks:
        if look.warm is None:
            row = Row(look.name, False, ((look.code, look.text),))
            if look.name in beside:
                one = [beside[look.name]]
                row = replace(_row(joint, unknowns, weighed(one, one)[0]), used=False,
                              reasons=row.reasons)
            rows.append(row)
            continue
        i = place[look.name]
        excess, weight = float(joint.excess[i]), float(joint.weights[i])
        reasons = ()
        if excess > _OUTLYING:
            reasons = (("disagrees", f"wants another bench by {excess:.1f} sigma; it counts "
                                     f"{weight:.2f} of a pulse"),)
        rows.append(replace(_row(joint, unknowns, joint.answers[i]), excess=excess, weight=weight,
                            reasons=reasons))
    return tuple(rows)


def _row(joint, unknowns, found):
    """Return the row of a pulse at the joint bench."""
    at = found.names.index("number")
    slope = found.follow[at].copy()
    for k, unknown in enumerate(unknowns):
        if unknown.key.endswith("temperature_K"):
            # The same droplets in a warmer gas at the same pressure are fewer per volume.
            slope[k] -= 1.0 / (unknown.value + joint.x[k])
    own = found.number_sigma
    shared = float(slope @ joint.covariance @ slope)
    value = float(np.exp(found.cloud.number - found.cloud.temperature))
    total = float(np.hypot(own, np.sqrt(shared)))
    return Row(
        found.name, True, (),
        (value, value * total) if total < _POOR else None, value * own if total < _POOR else None,
        found.final_radius, found.chi2_reduced, left=found.left,
    )
