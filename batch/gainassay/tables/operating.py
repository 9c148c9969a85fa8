"""The columns of the two tables that operating limits are checked from."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np
from numpy.typing import NDArray

from gainassay.contracts import tables
from gainassay.contracts.limits import LIMITS, WITH_A_DEFAULT
from gainassay.forms.coefficients import FloatArray
from gainassay.tables.checks import Checking
from gainassay.tables.order import gathered

Operating = Mapping[str, FloatArray]
"""Such columns by name, each of shape (rows,), nan where a cell is blank."""

OF_STAGES = tuple(dict.fromkeys([*(name for limit in LIMITS for name in limit.stages), *WITH_A_DEFAULT]))
OF_PARTS = tuple(dict.fromkeys(name for limit in LIMITS for name in limit.parts))

ORDERED = (
    ("v_ground", "v_supply", "the stage's ground lies above its positive supply"),
    ("v_supply_min", "v_supply_max", "the least supply lies above the largest"),
    ("t_part_min_c", "t_part_max_c", "the lowest temperature lies above the highest"),
)
"""Columns of which the first must not exceed the second, and what is wrong if it does."""


def read_stages(checking: Checking) -> Operating:
    """What the stages of a table say of the conditions under which they work."""
    return _read(checking, "stages", OF_STAGES)


def read_parts(checking: Checking) -> Operating:
    """What the parts of a table can bear."""
    return _read(checking, "parts", OF_PARTS)


def of_all(blocks: Sequence[Operating], order: NDArray[np.intp]) -> Operating:
    """The same of the rows at some places, from those of blocks of rows."""
    return {name: gathered([block[name] for block in blocks], order) for name in blocks[0]}


def at(operating: Operating, rows: NDArray[np.intp]) -> Operating:
    """The same of some rows."""
    return {name: values[rows] for name, values in operating.items()}


def _read(checking: Checking, table: str, names: Sequence[str]) -> Operating:
    found = {name: checking.column(tables.column(table, name)).values for name in names}
    for low, high, fault in ORDERED:
        if low in found:
            checking.refuse_where(found[low] > found[high], f"{low}, {high}", fault)
    return found
