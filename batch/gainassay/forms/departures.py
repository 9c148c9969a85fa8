"""The ways in which a part departs from an ideal op-amp, each written so that 0 is ideal.

This table is the only place that lists them: equations, terms, the parts table and evidence follow it.
"""

from __future__ import annotations

from dataclasses import dataclass


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
    """

    symbol: str
    quantity: str
    reciprocal: bool
    term: str
    unit: str
    poorest: float

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

OPEN_LOOP_GAIN = DEPARTURES[0]


def term_name(product: list[tuple[str, Departure]], several_amplifiers: bool) -> str:
    """Name of the term of a product of departures, open-loop gain understood beside any other.

    >>> a, g_id, r_o = DEPARTURES
    >>> term_name([("u1", a), ("u1", r_o)], several_amplifiers=False)
    'output_resistance'
    >>> term_name([("u1", a), ("u2", a), ("u2", g_id)], several_amplifiers=True)
    'u1.open_loop_gain+u2.input_resistance'
    """
    names = []
    for amplifier in dict.fromkeys(amplifier for amplifier, _ in product):
        own = [departure for name, departure in product if name == amplifier]
        others = [departure for departure in own if departure is not OPEN_LOOP_GAIN]
        prefix = f"{amplifier}." if several_amplifiers else ""
        names += [prefix + departure.term for departure in others or own]
    return "+".join(names)
