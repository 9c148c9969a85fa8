"""Two more views of each pair's error, beside its worst case: root-sum-square and Monte Carlo.

The worst case contains both. They rest on more than it does: that all quantities are independent of each other and
rectangular between their ends, whereas a worst case needs the ends alone.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from gainassay.forms.coefficients import FloatArray
from gainassay.screen import monte_carlo, rss
from gainassay.screen.monte_carlo import Lot


@dataclass(frozen=True)
class Views:
    """What the views find for each pair. All arrays have shape (stages, parts); nan: no finite bound.

    Attributes
    ----------
    error_mean, error_u : ndarray
        Mean and standard uncertainty of the error, as fractions.
    error_rss : ndarray
        The error `rss.COVERAGE_FACTOR` standard uncertainties beyond the mean, away from 0; the worst case where that
        lies beyond it.
    yield_mc, yield_mc_u : ndarray
        Share of samples inside the limit, and its standard uncertainty; 1 and 0 where the worst case is inside.
    """

    error_mean: FloatArray
    error_u: FloatArray
    error_rss: FloatArray
    yield_mc: FloatArray
    yield_mc_u: FloatArray


def views(lot: Lot, error_worst: FloatArray, samples: int) -> Views:
    """Both views of all pairs of a lot.

    Parameters
    ----------
    error_worst : ndarray, shape (stages, parts)
        The worst case as a fraction; nan where there is no finite bound.
    samples : int
        Of each pair.
    """
    has_bound = np.isfinite(error_worst)
    mean, uncertainty = rss.estimates(lot.form, lot.box, lot.limits)
    proved = np.abs(error_worst) <= lot.box.limits[:, None]
    inside = monte_carlo.inside(lot, has_bound & ~proved, samples)
    found = Views(
        error_mean=mean,
        error_u=uncertainty,
        error_rss=stated(mean, uncertainty, error_worst),
        yield_mc=np.where(proved, 1.0, inside / samples),
        yield_mc_u=np.where(proved, 0.0, share_uncertainty(inside, samples)),
    )
    return replace(found, **{name: np.where(has_bound, values, np.nan) for name, values in vars(found).items()})


def stated(mean: FloatArray, uncertainty: FloatArray, error_worst: FloatArray) -> FloatArray:
    """The error that is stated for a mean and a standard uncertainty.

    A quantity that outweighs all others lies inside its ends, but k u of a rectangular one lies beyond them: the worst
    case is stated then.
    """
    end = np.copysign(np.abs(mean) + rss.COVERAGE_FACTOR * uncertainty, mean)
    return np.where(np.abs(end) < np.abs(error_worst), end, error_worst)


def share_uncertainty(count: NDArray[np.int64], samples: int) -> FloatArray:
    """Standard uncertainty of a share estimated as count/samples.

    Of the share's distribution once the samples are known and any share was as likely before (Laplace's rule of
    succession). Unlike sqrt(p (1 - p)/N), to which it comes close, it is not 0 where all samples or none are inside.
    """
    return np.asarray(np.sqrt((count + 1.0) * (samples - count + 1.0) / (samples + 3.0)) / (samples + 2.0))
