"""The columns of the stage table that say at which frequencies a stage works."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from gainassay.contracts import tables
from gainassay.contracts.signals import Signals
from gainassay.tables.checks import Checking

FREQUENCIES = ("frequency_hz", "frequency_2_hz", "frequency_3_hz", "frequency_4_hz")
BAND = ("f_min_hz", "f_max_hz")
PHASE = "phase_accuracy_deg"


def read(checking: Checking, is_calibrated: NDArray[np.bool_]) -> Signals:
    """Read the frequencies of all rows; of a stage at 0 Hz all are nan."""
    single = np.array([_column(checking, name) for name in FREQUENCIES])
    low, high = (_column(checking, name) for name in BAND)
    phase = _column(checking, PHASE)
    is_single, is_band = ~np.isnan(single).all(axis=0), ~np.isnan(low) & ~np.isnan(high)
    for wrong, columns, reason in (
        (np.isnan(low) != np.isnan(high), ", ".join(BAND), "one end of the band is blank"),
        (low >= high, ", ".join(BAND), "the band's lower end does not lie below its upper end"),
        (is_single & is_band, ", ".join((FREQUENCIES[0], *BAND)), "give frequencies or a band, not both"),
        (is_calibrated & (is_single | is_band), "calibrated", "a calibrated stage is screened at 0 Hz only"),
        (~is_single & ~is_band & ~np.isnan(phase), PHASE, "there is no phase at 0 Hz; fill frequency_hz"),
    ):
        for position in np.flatnonzero(wrong).tolist():
            checking.refuse(position, columns, reason)
    # nan is sorted behind all numbers.
    hertz = np.sort(single, axis=0)
    hertz[:2] = np.where(is_band, (low, high), hertz[:2])
    return Signals(hertz, is_band, np.where(np.isnan(phase), np.inf, phase))


def _column(checking: Checking, name: str) -> NDArray[np.float64]:
    return checking.column(tables.column("stages", name)).values
