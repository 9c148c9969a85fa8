"""The ways in which a part departs from an ideal op-amp, each written so that 0 is ideal.

This table is the only place that lists them: equations, terms, the parts table and evidence follow it.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass


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
    """

    symbols: tuple[str, ...]
    quantity: str
    reciprocal: bool
    term: str
    unit: str
    poorest: float
    is_signed: bool = False
    places: tuple[str, ...] = ()

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

OPEN_LOOP_GAIN = DEPARTURES[0]

BASIC = DEPARTURES[:3]
"""Those that every form and every formula is derived with."""

PLACE = {symbol: place for place, departure in enumerate(DEPARTURES) for symbol in departure.symbols}
"""Place in `DEPARTURES` of the departure that a symbol belongs to."""


def derived_with(modelled: Iterable[bool], calibrated: bool = False) -> tuple[Departure, ...]:
    """The departures in the forms of a parts table, which models some of `DEPARTURES`.

    Parameters
    ----------
    calibrated : bool
        Whether the stages are: none of either sign is in their forms.
    """
    each = zip(DEPARTURES, modelled, strict=True)
    return tuple(
        departure
        for departure, is_modelled in each
        if departure in BASIC or (is_modelled and not (calibrated and departure.is_signed))
    )


def term_name(product: list[tuple[str, Departure]], several_amplifiers: bool) -> str:
    """Name of the term of a product of departures, open-loop gain understood beside any other.

    >>> a, g_id, r_o, *_ = DEPARTURES
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
        names += [prefix + departure.term for departure in dict.fromkeys(others or own)]
    return "+".join(names)
