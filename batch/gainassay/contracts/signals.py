"""The signals that stages work with, where these are not at 0 Hz."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

POINTS = 65
"""At which what a stage asks of its amplifiers is looked at in a band."""


@dataclass(frozen=True)
class Signals:
    """The signals of some stages.

    Attributes
    ----------
    hertz : ndarray, shape (most, stages)
        Frequencies of each stage, rising [Hz]; nan behind its last.
    is_band : ndarray of bool, shape (stages,)
        Whether the signal may have any frequency between the first two.
    phase_limits : ndarray, shape (stages,)
        Largest phase error [degree]; inf where it may be any.
    """

    hertz: NDArray[np.float64]
    is_band: NDArray[np.bool_]
    phase_limits: NDArray[np.float64]

    def points(self) -> NDArray[np.float64]:
        """Frequencies of each stage, in a band spread over it, as many for all [Hz]; shape (points, stages)."""
        single = np.where(np.isnan(self.hertz), self.hertz[0], self.hertz)
        if not self.is_band.any():
            return single
        ends = np.where(self.is_band, self.hertz[:2], single[[0, 0]])
        return np.concatenate([single, np.geomspace(ends[0], ends[1], POINTS)])

    def highest(self) -> NDArray[np.float64]:
        """The highest frequency of each stage [Hz], nan at 0 Hz; shape (stages,)."""
        return np.asarray(np.fmax.reduce(self.hertz, axis=0))

    def part(self, stages: slice | NDArray[np.intp]) -> Signals:
        """Some of the stages."""
        return Signals(self.hertz[:, stages], self.is_band[stages], self.phase_limits[stages])
