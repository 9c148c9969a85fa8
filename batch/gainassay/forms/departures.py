"""The ways in which a part departs from an ideal op-amp, each written so that 0 is ideal.

This table is the only place that lists them: equations, terms, the parts table and evidence follow it.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray


@dataclass(frozen=True)
class Departure:
    """One way a part departs from an ideal op-amp.

    Attributes
    ----------
    symbol : str
        Its symbol in the form.
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
    scale : float
        What the quantity, or its reciprocal, is multiplied by: 2 pi for a capacitance, whose admittance is 2 pi f c.
    """

    symbol: str
    quantity: str
    reciprocal: bool
    term: str
    unit: str
    poorest: float
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
    Departure("a", "a_ol", True, "open_loop_gain", "V/V", 1.0),
    Departure("g_id", "r_id", True, "input_resistance", "ohm", 1.0),
    Departure("r_o", "r_o", False, "output_resistance", "ohm", 1e6),
)

OPEN_LOOP_GAIN, DIFFERENTIAL_INPUT = DEPARTURES[:2]

BANDWIDTH = Departure("b", "gbw", True, "bandwidth", "Hz", 1.0)
INPUT_CAPACITANCE = Departure("c_id", "c_id", False, "input_capacitance", "F", 1e-6, 2.0 * np.pi)

RISING = {OPEN_LOOP_GAIN.symbol: BANDWIDTH, DIFFERENTIAL_INPUT.symbol: INPUT_CAPACITANCE}
"""What adds j f times itself to a departure at the frequency f: 1/A = 1/A_OL + j f/GBW, and so for capacitances."""

FIGURES = (*DEPARTURES, *RISING.values())
"""All that a part may be asked for: the departures at 0 Hz, then those that rise with frequency."""

AT_DC = slice(len(DEPARTURES))
"""Places of the departures at 0 Hz among `FIGURES`."""


def term_name(product: list[tuple[str, Departure]], several_amplifiers: bool) -> str:
    """Name of the term of a product of departures, open-loop gain understood beside any other.

    >>> a, g_id, r_o = DEPARTURES
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
        names += [prefix + departure.term for departure in others or own]
    return "+".join(names)
