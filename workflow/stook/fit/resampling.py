"""Covariance of the coefficients from refits: clusters left out, or blocks drawn again."""

from __future__ import annotations

import numpy as np
import pandas as pd

from stook.errors import InputError
from stook.fit.design import Design
from stook.fit.document import Fit
from stook.fit.kernels import take_out
from stook.fit.panel import Sample
from stook.randomness import generator

_MOST_FAILED = 0.1


def jackknife(design: Design, cluster: np.ndarray, name: str, reported: int) -> np.ndarray:
    """Return the covariance over refits without one cluster each.

    ``(G - 1) / G`` times the sum of squares of the refits about the estimate: the estimator CV3
    of MacKinnon, Nielsen & Webb 2023 (J. Appl. Econometrics 38, 671-694).

    Parameters
    ----------
    design
        The regression.
    cluster
        Cluster of every row, int from 0.
    name
        Of the specification.
    reported
        How many slopes are wanted, from the first.

    Raises
    ------
    InputError
        If a coefficient cannot be estimated without some cluster.
    """
    count = int(cluster.max()) + 1
    size = design.regressors.shape[1]
    whole = design.solve(design.weights)[0][:reported]
    total = np.zeros((reported, reported))
    for left_out in range(count):
        kept = (cluster != left_out).astype(float)
        found, _, rank = design.solve(design.weights * kept)
        if rank < size and not _determined(design, kept, reported):
            raise InputError(
                f"specification {name}: perfect collinearity without one of the {count} clusters: "
                "a coefficient hangs on that cluster alone; use fewer terms, or other knots"
            )
        change = found[:reported] - whole
        total += np.outer(change, change)
    return (count - 1) / count * total


def bootstrap(
    fit: Fit,
    design: Design,
    sample: Sample,
    blocks: np.ndarray | None,
    name: str,
    reported: int,
) -> tuple[np.ndarray, int]:
    """Return the covariance over refits to resampled blocks, and the number of blocks.

    Whole blocks of rows are drawn with replacement: years, with all their units; or blocks of
    units, with all their years. A row drawn twice counts twice.

    Raises
    ------
    InputError
        If more than a tenth of the replications cannot tell the coefficients apart.
    """
    choices = fit.standard_errors
    random = generator(fit.seed, "fit", name, choices.method)
    if blocks is None:
        member, count = pd.factorize(sample.rows["year"], sort=True)[0], None
    else:
        member, count = pd.factorize(blocks, sort=True)[0], 1
    units = int(member.max()) + 1
    length = min(count or choices.block_years, units)
    number = -(-units // length)
    size = design.regressors.shape[1]
    slopes = []
    for _ in range(choices.replications):
        starts = random.integers(0, units - length + 1, number)
        drawn = (starts[:, None] + np.arange(length)).ravel()[:units]
        times = np.bincount(drawn, minlength=units)[member]
        found, _, rank = design.solve(design.weights * times)
        if rank == size or _determined(design, times, reported):
            slopes.append(found[:reported])
    if len(slopes) < (1 - _MOST_FAILED) * choices.replications:
        raise InputError(
            f"specification {name}: perfect collinearity in "
            f"{choices.replications - len(slopes)} of {choices.replications} bootstrap samples; "
            f"use fewer terms, or {'smaller blocks' if length > 1 else 'another covariance'}"
        )
    return np.atleast_2d(np.cov(np.array(slopes).T)), number


def _determined(design: Design, times: np.ndarray, reported: int) -> bool:
    """Return whether the reported slopes are determined, though others (year effects) are not."""
    kept = times > 0
    used = design.regressors[kept]
    left = take_out(
        used, design.basis[kept], design.group[kept], design.groups, design.weights[kept]
    )
    lengths = np.linalg.norm(left, axis=0)
    there = lengths > 1e-9 * np.maximum(np.linalg.norm(used, axis=0), 1e-300)
    if not there[:reported].all():
        return False
    left = left[:, there] / lengths[there]
    rank = np.linalg.matrix_rank(left, tol=1e-9)
    rest = left[:, reported:]
    other = np.linalg.matrix_rank(rest, tol=1e-9) if rest.size else 0
    return bool(rank - other == reported)
