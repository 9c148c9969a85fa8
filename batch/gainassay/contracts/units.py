"""Units as people write them: the power of ten between what stands in a cell and the unit of its column."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import cache

KILO_UP = {"k": 3, "K": 3, "M": 6, "G": 9, "T": 12}
"""SI prefixes. `K` is taken for kilo: it stands before a unit, where no kelvin can stand."""

MEGA = {"Meg": 6, "meg": 6, "MEG": 6}
MILLI_DOWN = {"m": -3, "u": -6, "\u00b5": -6, "\u03bc": -6, "n": -9, "p": -12, "f": -15}

MILLI_OR_MEGA = "'m' could be milli or mega; write the number without a prefix"
MEGA_OR_MICRO = "'M' could be mega or, in old lists, micro; write the number without a prefix"


@dataclass(frozen=True)
class Notation:
    """How people write a unit.

    Attributes
    ----------
    symbols : tuple[str, ...]
        Its symbols; all take the prefixes.
    prefixes : Mapping[str, int]
        Prefixes and their powers of ten; each may stand alone, too: `4.7k`.
    others : Mapping[str, int]
        Whole units that differ by a power of ten, such as V/mV from V/V.
    doubtful : Mapping[str, str]
        Prefixes that could be read in two ways, and which.
    foreign : Mapping[str, str]
        Units that no power of ten turns into this one, and what to do about them.
    """

    symbols: tuple[str, ...]
    prefixes: Mapping[str, int] = field(default_factory=dict)
    others: Mapping[str, int] = field(default_factory=dict)
    doubtful: Mapping[str, str] = field(default_factory=dict)
    foreign: Mapping[str, str] = field(default_factory=dict)


OWN_DECIBEL_COLUMN = "such figures belong into a column in dB"
CELSIUS = ("degC", "C", "\u00b0C", "\u2103")
NO_CELSIUS = "temperatures stand in degrees Celsius"

NOTATIONS = {
    "ohm": Notation(
        symbols=("ohm", "Ohm", "OHM", "ohms", "Ohms", "\u03a9", "\u2126"),
        prefixes={**KILO_UP, **MEGA},
        doubtful={"m": MILLI_OR_MEGA},
    ),
    "F": Notation(symbols=("F", "farad"), prefixes=MILLI_DOWN, doubtful={"M": MEGA_OR_MICRO}),
    "H": Notation(symbols=("H", "henry"), prefixes=MILLI_DOWN, doubtful={"M": MEGA_OR_MICRO}),
    "Hz": Notation(
        symbols=("Hz", "HZ", "hz"), prefixes={**KILO_UP, **MEGA}, doubtful={"m": MILLI_OR_MEGA}
    ),
    "V": Notation(symbols=("V", "volt"), prefixes={"k": 3, **MILLI_DOWN}),
    "A": Notation(symbols=("A", "ampere"), prefixes=MILLI_DOWN),
    "V/us": Notation(
        symbols=("V/us", "V/\u00b5s", "V/\u03bcs"),
        prefixes={"k": 3, "m": -3},
        others={"V/s": -6, "V/ms": -3, "V/ns": 3},
    ),
    "V/V": Notation(
        symbols=("V/V",),
        prefixes=KILO_UP,
        others={"V/mV": 3, "V/uV": 6, "V/\u00b5V": 6, "V/\u03bcV": 6},
        doubtful={"m": MILLI_OR_MEGA},
        foreign=dict.fromkeys(("dB", "db", "DB"), OWN_DECIBEL_COLUMN),
    ),
    "dB": Notation(
        symbols=("dB", "db", "DB"),
        foreign=dict.fromkeys(("V/V", "V/mV"), "such figures belong into a column in V/V"),
    ),
    "%": Notation(symbols=("%", "percent", "pct"), others={"ppm": -4, "PPM": -4, "\u2030": -1}),
    "ppm": Notation(symbols=("ppm", "PPM"), others={"%": 4}),
    "ppm/K": Notation(
        symbols=tuple(f"{part}/{kelvin}" for part in ("ppm", "PPM") for kelvin in ("K", *CELSIUS)),
        others={f"%/{kelvin}": 4 for kelvin in ("K", *CELSIUS)},
    ),
    "degree": Notation(symbols=("degree", "deg", "\u00b0")),
    "degree Celsius": Notation(
        symbols=("degree Celsius", *CELSIUS),
        foreign={**dict.fromkeys(("K", "kelvin"), NO_CELSIUS), **dict.fromkeys(("F", "\u00b0F", "degF"), NO_CELSIUS)},
    ),
}  # fmt: skip
"""By the unit of a column, as `schemas/` names it. A unit that is not here is understood as it stands there."""


def notation(unit: str) -> Notation:
    """How a column's unit is written."""
    return NOTATIONS.get(unit) or Notation(symbols=(unit,) if unit not in ("", "1", "gain") else ())


@cache
def spelled(unit: str, bare: bool) -> dict[str, int]:
    """What may follow a number in a column of a unit, and its power of ten.

    Parameters
    ----------
    bare : bool
        Whether a prefix may stand alone, as in `4.7k`.

    Examples
    --------
    >>> spelled("ohm", True)["kohm"], spelled("ohm", True)["k"], "k" in spelled("ohm", False)
    (3, 3, False)
    """
    written = notation(unit)
    prefixes = {"": 0, **written.prefixes}
    found = {f"{prefix}{symbol}": power for symbol in written.symbols for prefix, power in prefixes.items()}
    return {**found, **written.others, **(written.prefixes if bare else {})}


@cache
def misread(unit: str) -> dict[str, str]:
    """What may follow a number but cannot be taken, and why."""
    written = notation(unit)
    doubtful = {
        f"{prefix}{symbol}": why for prefix, why in written.doubtful.items() for symbol in ("", *written.symbols)
    }
    return {**doubtful, **written.foreign}


def power_of_ten(unit: str, own: str) -> int | None:
    """The power of ten that turns numbers of a unit into those of a column's own unit; None if there is none."""
    return spelled(own, bare=False).get(unit)
