"""The boxes of stages: how far each element may lie from its nominal value, and which elements move together.

An element's value is nominal x own factor, times a factor common to its network if it tracks others. Every factor has a
range of its own, so that a box stays a box. Two resistors of a network may be apart by its ratio tolerance p and each
may be off by its absolute tolerance t: with all own factors in (1 + p)^(-1/2) .. (1 + p)^(1/2) and the common factor
in (1 - t)(1 + p)^(1/2) .. (1 + t)(1 + p)^(-1/2) these are just the resistors within both tolerances, none left out
and none added.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from gainassay.contracts.moves import MOVES, TOLERANCE
from gainassay.contracts.signals import Signals
from gainassay.forms.coefficients import FloatArray


@dataclass(frozen=True)
class Range:
    """Factors on nominal values.

    Attributes
    ----------
    low, high : ndarray, shape (moves, elements or networks, stages)
        Least and largest factor by which each of `MOVES` multiplies; 1 where it moves nothing.
    """

    low: FloatArray
    high: FloatArray

    def part(self, stages: slice | NDArray[np.intp]) -> Range:
        """Some of the stages."""
        return Range(self.low[:, :, stages], self.high[:, :, stages])

    def moves(self) -> NDArray[np.bool_]:
        """Whether anything moves an element or network of a stage; shape (elements or networks, stages)."""
        return np.asarray((self.low < self.high).any(axis=0))


@dataclass(frozen=True)
class StageBox:
    """Stages of one topology with their boxes.

    Attributes
    ----------
    values : ndarray, shape (elements, stages)
        Nominal values [ohm, F, H].
    own, common : Range
        Of each element for itself; of each network for all its members.
    network : ndarray of int, shape (elements, stages)
        The network that an element's common factor is of, -1 for none.
    limits, targets : ndarray, shape (stages,)
        Required accuracy as a fraction; target gain [gain unit] or nan.
    signals : Signals or None
        Of stages that do not work at 0 Hz.
    """

    values: FloatArray
    own: Range
    common: Range
    network: NDArray[np.int8]
    limits: FloatArray
    targets: FloatArray
    signals: Signals | None = None

    def part(self, stages: slice | NDArray[np.intp]) -> StageBox:
        """Some of the stages."""
        return StageBox(
            self.values[:, stages],
            self.own.part(stages),
            self.common.part(stages),
            self.network[:, stages],
            self.limits[stages],
            self.targets[stages],
            self.signals and self.signals.part(stages),
        )

    def ends(self) -> tuple[FloatArray, FloatArray]:
        """Least and largest factor on each element's nominal value; shape (elements, stages)."""
        together = _of_members(self.network, self.common)
        low, high = product(self.own.low), product(self.own.high)
        return low * product(together.low), high * product(together.high)

    def memberships(self) -> set[tuple[bool, ...]]:
        """The sets of elements that make up a network in any stage."""
        patterns = np.unique(self.network, axis=1).T
        return {tuple((pattern == place).tolist()) for pattern in patterns for place in set(pattern.tolist()) - {-1}}

    def untied(self, loose: NDArray[np.bool_]) -> StageBox:
        """The box in which the networks of some stages do not track: larger, so that its worst case bounds theirs."""
        together = _of_members(self.network, self.common)
        own = Range(
            *(np.where(loose, one * other, one) for one, other in zip(_ends(self.own), _ends(together), strict=True))
        )
        common = Range(*(np.where(loose, 1.0, end) for end in _ends(self.common)))
        return replace(self, own=own, common=common, network=np.where(loose, np.int8(-1), self.network))

    def moved_by(self, moves: Sequence[int]) -> StageBox:
        """The box in which only some of `MOVES` move anything."""
        is_chosen = np.isin(np.arange(len(MOVES)), moves)[:, None, None]
        own, common = (Range(*(np.where(is_chosen, end, 1.0) for end in _ends(of))) for of in (self.own, self.common))
        return replace(self, own=own, common=common)

    def at_dc(self, kinds: tuple[str, ...]) -> StageBox:
        """The box at 0 Hz, where nothing that moves a capacitor or an inductor matters."""
        is_resistor = np.array([kind == "resistor" for kind in kinds])[:, None]
        return replace(self, own=Range(*(np.where(is_resistor, end, 1.0) for end in _ends(self.own))))


def box(
    values: FloatArray,
    spreads: FloatArray,
    limits: FloatArray,
    targets: FloatArray,
    network: NDArray[np.int8] | None = None,
    ratios: FloatArray | None = None,
) -> StageBox:
    """Boxes from tolerances and the like, as fractions.

    Parameters
    ----------
    spreads : ndarray, shape (moves, elements, stages)
        How far each of `MOVES` may take an element, up or down; the same for all members of a network.
    network : ndarray of int, shape (elements, stages), optional
        The network an element belongs to, -1 for none.
    ratios : ndarray, shape (moves, networks, stages), optional
        How far it may take the ratio of two members; nan where members do not track.
    """
    none = np.zeros((len(MOVES), 0, values.shape[1]))
    own = Range(1.0 - spreads, 1.0 + spreads)
    if network is None or ratios is None or (network < 0).all():
        return StageBox(values, own, Range(none, none), np.full(values.shape, -1, np.int8), limits, targets)
    common = Range(np.ones(ratios.shape), np.ones(ratios.shape))
    tied = np.zeros(network.shape, dtype=bool)
    for place in range(ratios.shape[1]):
        is_member = network == place
        for move, ratio in enumerate(ratios[:, place]):
            spread = np.where(is_member, spreads[move], 0.0).max(axis=0)
            apart = np.sqrt(1.0 + ratio)
            low, high = (1.0 - spread) * apart, (1.0 + spread) / apart
            # A ratio that may be off by more than the absolute values allow binds nothing; nan compares so.
            binds = (is_member.sum(axis=0) > 1) & (low < high)
            common.low[move, place], common.high[move, place] = np.where(binds, low, 1.0), np.where(binds, high, 1.0)
            for end, factor in ((own.low, 1.0 / apart), (own.high, apart)):
                end[move] = np.where(is_member & binds, factor, end[move])
            tied |= is_member & binds
    return StageBox(values, own, common, np.where(tied, network, np.int8(-1)), limits, targets)


def with_tolerances(values: FloatArray, tolerances: FloatArray, limits: FloatArray, targets: FloatArray) -> StageBox:
    """Boxes from tolerances alone, as fractions; shape (elements, stages)."""
    spreads = np.zeros((len(MOVES), *values.shape))
    spreads[TOLERANCE] = tolerances
    return box(values, spreads, limits, targets)


def product(factors: FloatArray) -> FloatArray:
    """The product over all moves, in their order."""
    return np.asarray(np.multiply.reduce(factors, axis=0))


def _ends(of: Range) -> tuple[FloatArray, FloatArray]:
    return of.low, of.high


def _of_members(network: NDArray[np.int8], common: Range) -> Range:
    """The common factors of each element's network; shape (moves, elements, stages)."""
    return Range(*(of_members(network, end) for end in _ends(common)))


def of_members(network: NDArray[np.int8], factors: FloatArray) -> FloatArray:
    """Factors of networks handed to their members, 1 to all others.

    Parameters
    ----------
    network : ndarray of int, shape (elements, stages)
    factors : ndarray, shape (moves, networks, stages)

    Returns
    -------
    ndarray, shape (moves, elements, stages)
    """
    found = np.ones((len(factors), *network.shape))
    for place in range(factors.shape[1]):
        found = np.where(network == place, factors[:, place, None, :], found)
    return found
