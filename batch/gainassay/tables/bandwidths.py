"""What the parts table says of the fall of the open-loop gain with frequency."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from gainassay.contracts import tables
from gainassay.forms.coefficients import FloatArray
from gainassay.tables.checks import Checking
from gainassay.tables.order import gathered

SECOND_POLE = "f_second_pole_hz"


@dataclass(frozen=True)
class Bandwidths:
    """Figures of some parts, as the table has them; nan where a cell is blank. Arrays of shape (parts,).

    Attributes
    ----------
    gbw_min, gbw_typ : ndarray
        Gain-bandwidth product, guaranteed lower limit and typical [Hz].
    second_pole : ndarray
        Frequency of the second pole [Hz].
    has_second_pole : bool
        Whether the table has a column for it at all; if not, it is not modelled.
    """

    gbw_min: FloatArray
    gbw_typ: FloatArray
    second_pole: FloatArray
    has_second_pole: bool

    def nominal(self) -> FloatArray:
        """The gain-bandwidth product [Hz]: typical where given, else the limit; nan where neither is."""
        return np.where(np.isnan(self.gbw_typ), self.gbw_min, self.gbw_typ)


def of_all(blocks: Sequence[Bandwidths], order: NDArray[np.intp]) -> Bandwidths:
    """The figures of the parts at some places, from those of blocks of rows."""
    least, typical, pole = (
        gathered([getattr(block, name) for block in blocks], order) for name in ("gbw_min", "gbw_typ", "second_pole")
    )
    return Bandwidths(least, typical, pole, blocks[0].has_second_pole)


def read(checking: Checking) -> Bandwidths:
    """Read the figures of all rows."""
    least, typical, pole = (
        checking.column(tables.column("parts", name)).values for name in ("gbw_min", "gbw_typ", SECOND_POLE)
    )
    checking.refuse_where(typical < least, "gbw_min, gbw_typ", "the minimum lies above the typical figure")
    return Bandwidths(least, typical, pole, SECOND_POLE in checking.raw.columns)
