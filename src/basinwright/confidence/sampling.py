"""Samples of uncertain inputs, and the bands that their results make."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping

import numpy as np
from numpy.typing import ArrayLike

from basinwright.errors import RangeError
from basinwright.numbers import Floats

BAND = (0.05, 0.50, 0.95)
"""The shares of a sample that a band is made of."""


def latin_hypercube(
    seed: int,
    outlet_id: str,
    samples: int,
    inputs: int,
    rank_correlation: Mapping[tuple[int, int], float] | None = None,
) -> Floats:
    """Sample uncertain inputs of one outlet: every input has one value in each of `samples` equal slices.

    Parameters
    ----------
    seed : int
        Of the run.
    outlet_id : str
        With the seed it decides the numbers: they do not depend on the other outlets.
    samples, inputs : int
        Rows and columns.
    rank_correlation : mapping of (int, int) to float, optional
        Spearman's rank correlation of two columns [-]; 0 where a pair is left out.

    Returns
    -------
    array, shape (samples, inputs)
        Shares of each input's range, above 0 and below 1 [-].

    Raises
    ------
    RangeError
        Where the correlations contradict each other.

    Notes
    -----
    Latin hypercube sampling: M. D. McKay, R. J. Beckman and W. J. Conover, Technometrics 21, 1979, by scipy.stats.qmc.
    Correlation by reordering each column: R. L. Iman and W. J. Conover, Communications in Statistics B11, 1982, on
    normal scores, whose correlation r gives the rank correlation 6 / pi arcsin(r / 2). The values of each column stay.

    Examples
    --------
    >>> sample = latin_hypercube(1, "A", 4, 2)
    >>> sorted((sample[:, 0] * 4).astype(int).tolist())
    [0, 1, 2, 3]
    """
    from scipy.stats import qmc

    digest = int.from_bytes(hashlib.sha256(outlet_id.encode()).digest()[:16], "little")
    generator = np.random.default_rng([seed, digest])
    share = np.asarray(qmc.LatinHypercube(inputs, seed=generator).random(samples), dtype=np.float64)
    share = np.clip(share, 2.0**-53, 1.0 - 2.0**-53)
    return _reordered(share, rank_correlation) if rank_correlation else share


def score_correlation(inputs: int, rank_correlation: Mapping[tuple[int, int], float]) -> Floats:
    """Return the lower Cholesky factor of the correlations of normal scores that give these rank correlations.

    Raises
    ------
    RangeError
        Where no sample can have them all.
    """
    wanted = np.eye(inputs)
    for (a, b), rank in rank_correlation.items():
        wanted[a, b] = wanted[b, a] = 2.0 * np.sin(np.pi * rank / 6.0)
    try:
        return np.asarray(np.linalg.cholesky(wanted), dtype=np.float64)
    except np.linalg.LinAlgError:
        raise RangeError("the correlations contradict each other: no sample can have them all") from None


def _reordered(share: Floats, rank_correlation: Mapping[tuple[int, int], float]) -> Floats:
    from scipy.special import ndtri

    factor = score_correlation(share.shape[1], rank_correlation)
    scores = ndtri(share)
    own = np.linalg.cholesky(np.corrcoef(scores, rowvar=False))
    target = scores @ np.linalg.inv(own).T @ factor.T
    order = np.argsort(np.argsort(target, axis=0, kind="stable"), axis=0, kind="stable")
    return np.asarray(np.take_along_axis(np.sort(share, axis=0), order, axis=0))


def band(values: ArrayLike) -> Floats:
    """Return the values that 5, 50 and 95 % of a sample do not exceed.

    Parameters
    ----------
    values : array, shape (..., samples)

    Returns
    -------
    array, shape (..., 3)

    Notes
    -----
    The k-th smallest of n stands for the share (k - 0.5) / n, the middle of its slice (A. Hazen, Trans. ASCE 77, 1914);
    linear between them.

    Examples
    --------
    >>> band((np.arange(100) + 0.5) / 100).round(12).tolist()
    [0.05, 0.5, 0.95]
    """
    return np.moveaxis(np.quantile(np.asarray(values, dtype=np.float64), BAND, axis=-1, method="hazen"), 0, -1)
