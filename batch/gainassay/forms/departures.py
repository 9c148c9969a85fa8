"""The ways in which a part departs from an ideal op-amp, each written so that 0 is ideal.

This table is the only place that lists them: equations, terms, the parts table and evidence follow it.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray


@dataclass(frozen=True)
class Departure:
    """One way a part departs from an ideal op-amp.

    Attributes
    ----------
    symbols : tuple[str, ...]
        Its symbols in the form, each between 0 and the same limit. Several are as many quantities of an amplifier
        that one figure bounds, unless `is_signed`.
    quantity : str
        The data-sheet quantity it comes from, and the stem of its columns in the parts table.
    reciprocal : bool
        True if the departure is 1/quantity, so that a *lower* limit of the quantity bounds it; False if it is
        the quantity itself, which an *upper* limit bounds.
    term : str
        Name of the error term it gives.
    unit : str
        Unit of the data-sheet quantity.
    poorest : float
        The poorest figure of the quantity that is looked at when asking how poor a part may be [unit]: that of no
        op-amp.
    is_signed : bool
        True if it may have either sign: it is then its first symbol less its second, one of which is 0, and
        nominally 0.
    places : tuple[str, ...]
        Where each symbol acts, if they are several quantities.
    scale : float
        What the quantity, or its reciprocal, is multiplied by: 2 pi for a capacitance, whose admittance is 2 pi f c.
    """

    symbols: tuple[str, ...]
    quantity: str
    reciprocal: bool
    term: str
    unit: str
    poorest: float
    is_signed: bool = False
    places: tuple[str, ...] = ()
    scale: float = 1.0

    def of(self, figure: NDArray[np.float64]) -> NDArray[np.float64]:
        """The departure that a figure of the quantity gives."""
        return self.scale / figure if self.reciprocal else self.scale * figure

    def figure(self, value: float) -> float:
        """The figure of the quantity that gives a departure."""
        if not self.reciprocal:
            return value / self.scale
        return self.scale / value if value else np.inf

    @property
    def limit_column(self) -> str:
        """Column of the data-sheet limit that bounds the departure."""
        return f"{self.quantity}_{'min' if self.reciprocal else 'max'}"

    @property
    def hot_column(self) -> str:
        """Column of the limit that holds over temperature."""
        return f"{self.limit_column}_hot"

    @property
    def change_column(self) -> str:
        """Column of the quantity's change over temperature and supply after a calibration."""
        return f"{self.quantity}_change_pct"


DEPARTURES = (
    Departure(("a",), "a_ol", True, "open_loop_gain", "V/V", 1.0),
    Departure(("g_id",), "r_id", True, "input_resistance", "ohm", 1.0),
    Departure(("r_o",), "r_o", False, "output_resistance", "ohm", 1e6),
    Departure(("g_icp", "g_icn"), "r_icm", True, "common_mode_resistance", "ohm", 1.0, places=("at_plus", "at_minus")),
    Departure(("c_pos", "c_neg"), "cmrr", True, "common_mode_rejection", "V/V", 1.0, is_signed=True),
)

OPEN_LOOP_GAIN, _, _, _, COMMON_MODE_REJECTION = DEPARTURES

BANDWIDTH = Departure(("b",), "gbw", True, "bandwidth", "Hz", 1.0)
INPUT_CAPACITANCE = Departure(("c_id",), "c_id", False, "input_capacitance", "F", 1e-6, scale=2.0 * np.pi)
COMMON_MODE_CAPACITANCE = Departure(
    ("c_icp", "c_icn"), "c_icm", False, "common_mode_capacitance", "F", 1e-6, scale=2.0 * np.pi
)

RISING = {
    "a": BANDWIDTH,
    "g_id": INPUT_CAPACITANCE,
    "g_icp": COMMON_MODE_CAPACITANCE,
    "g_icn": COMMON_MODE_CAPACITANCE,
}
"""What adds j f times itself to the departure of a symbol at the frequency f: 1/A = 1/A_OL + j f/GBW, and so for
capacitances."""

FIGURES = (*DEPARTURES, *dict.fromkeys(RISING.values()))
"""All that a part may be asked for: the departures at 0 Hz, then those that rise with frequency."""

AT_DC = slice(len(DEPARTURES))
"""Places of the departures at 0 Hz among `FIGURES`."""

BASIC = DEPARTURES[:3]
"""Those that every form and every formula is derived with."""

PLACE = {symbol: place for place, departure in enumerate(DEPARTURES) for symbol in departure.symbols}
"""Place in `DEPARTURES` of the departure that a symbol belongs to."""


def derived_with(
    modelled: Sequence[bool], calibrated: bool = False, at_frequency: bool = False
) -> tuple[Departure, ...]:
    """The departures in the forms of a parts table, which models some of `FIGURES`.

    Parameters
    ----------
    calibrated : bool
        Whether the stages are: none of either sign is in their forms.
    at_frequency : bool
        Whether the stages work at a frequency: what rises is reason enough to have a departure then.
    """
    known = dict(zip(FIGURES, modelled, strict=True))

    def is_in(departure: Departure) -> bool:
        rising = at_frequency and any(known[RISING[symbol]] for symbol in departure.symbols if symbol in RISING)
        return (known[departure] or rising) and not (calibrated and departure.is_signed)

    return tuple(departure for departure in DEPARTURES if departure in BASIC or is_in(departure))


def term_name(product: list[tuple[str, Departure]], several_amplifiers: bool) -> str:
    """Name of the term of a product of departures, open-loop gain understood beside any other.

    >>> a, g_id, r_o, *_ = DEPARTURES
    >>> term_name([("u1", a), ("u1", r_o)], several_amplifiers=False)
    'output_resistance'
    >>> term_name([("u1", a), ("u2", a), ("u2", g_id)], several_amplifiers=True)
    'u1.open_loop_gain+u2.input_resistance'

    Bandwidth is understood as open-loop gain is.
    """
    names = []
    for amplifier in dict.fromkeys(amplifier for amplifier, _ in product):
        own = [departure for name, departure in product if name == amplifier]
        others = [departure for departure in own if departure not in (OPEN_LOOP_GAIN, BANDWIDTH)]
        prefix = f"{amplifier}." if several_amplifiers else ""
        names += [prefix + departure.term for departure in dict.fromkeys(others or own)]
    return "+".join(names)
