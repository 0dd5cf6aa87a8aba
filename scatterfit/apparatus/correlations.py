"""Correlations between the errors of stated values: what the chamber file may say about them."""

import numpy as np

from scatterfit.apparatus.keys import KEYS_OF
from scatterfit.apparatus.overrides import split_path
from scatterfit.apparatus.values import fail

_SAME = 1e-9
_ROUNDED = 1e-3
"""Rounded coefficients may make a variance a little negative."""


def check_correlations(bench, where):
    """Refuse correlations that cannot be.

    Parameters
    ----------
    bench : Apparatus
        The bench.
    where : str
        What messages call the file.

    Raises
    ------
    ChamberFileError
        If a key path is not known or there twice, or the matrix is not square, not symmetric, has
        other than ones on its diagonal, or is not that of any errors.
    """
    stated = bench.correlations
    if stated is None:
        return
    columns = {detector.column for detector in bench.detectors}
    for path in stated.of:
        parts = split_path(path)
        key = KEYS_OF[parts[0]].get(parts[2]) if parts else None
        if key is None or not key.takes_sigma or (parts[0] == "detector"
                                                  and parts[1] not in columns):
            fail(where, "correlations.of", path, "no value of this bench that may have a sigma")
    if len(set(stated.of)) < len(stated.of):
        fail(where, "correlations.of", list(stated.of), "each key path may stand there once")
    _check_matrix(stated.matrix, len(stated.of), where)


def _check_matrix(matrix, size, where):
    path, rows = "correlations.matrix", [list(row) for row in matrix]
    if len(matrix) != size or any(len(row) != size for row in matrix):
        fail(where, path, rows, f"must have {size} rows of {size} numbers, as many as there are "
                                "key paths")
    for i in range(size):
        if matrix[i][i] != 1.0:
            fail(where, path, rows, f"row {i + 1} must have 1 on the diagonal")
        for j in range(i):
            if abs(matrix[i][j] - matrix[j][i]) > _SAME:
                fail(where, path, rows, f"must be symmetric; rows {j + 1} and {i + 1} differ")
            if abs(matrix[i][j]) > 1.0:
                fail(where, path, matrix[i][j], "a correlation lies between -1 and 1")
    if size and float(np.linalg.eigvalsh(np.array(rows)).min()) < -_ROUNDED:
        fail(where, path, rows, "no errors hang together like this: a sum of them would have a "
                                "negative variance")


def correlation_block(bench, names):
    """Return the correlations among some inputs, as rows.

    Parameters
    ----------
    bench : Apparatus
        The bench.
    names : sequence of str
        Key paths.

    Returns
    -------
    rows : list of list of float
        Correlation coefficients, zero where nothing is stated [-].
    """
    stated = bench.correlations
    place = {} if stated is None else {path: i for i, path in enumerate(stated.of)}
    return [
        [1.0 if a == b else stated.matrix[place[a]][place[b]] if a in place and b in place else 0.0
         for b in names]
        for a in names
    ]
