"""The two sides of a screen before they meet: stages at every corner of their tolerances, parts at their limits.

A corner of a pair is a corner of the stage (each toleranced element at its lower or upper end) together with
a corner of the part (each departure at 0 or at its limit). At a corner of the part the products m_k are either
what the limits give or 0, so its corners come down to sets of *active* products, most of them shared.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import product

import numpy as np
from numpy.typing import NDArray

from gainassay.errors import InputError
from gainassay.forms import coefficients
from gainassay.forms.coefficients import FloatArray
from gainassay.forms.departures import DEPARTURES
from gainassay.forms.form import Form

MOST_TOLERANCED_ELEMENTS = 14
"""Beyond this the corners of one stage, two to that power, are too many to visit."""

SET_POINT = "set_point"
TOLERANCE = "{}.tolerance"


@dataclass(frozen=True)
class StageBox:
    """Stages of one topology with their tolerances.

    Attributes
    ----------
    values, tolerances : ndarray, shape (elements, stages)
        Nominal values [ohm] and tolerances as fractions.
    limits, targets : ndarray, shape (stages,)
        Required accuracy as a fraction; target gain [gain unit] or nan.
    """

    values: FloatArray
    tolerances: FloatArray
    limits: FloatArray
    targets: FloatArray

    def part(self, stages: slice) -> StageBox:
        """Some of the stages."""
        return StageBox(self.values[:, stages], self.tolerances[:, stages], self.limits[stages], self.targets[stages])


@dataclass(frozen=True)
class StageSide:
    """What the kernel needs of some stages of one topology.

    Attributes
    ----------
    gain_ideal, reference, limits, set_point : ndarray, shape (stages,)
        Ideal gain at the nominal values [gain unit], the gain that errors refer to [gain unit], required
        accuracy as a fraction, and (gain_ideal - reference)/reference.
    contrasts, loadings : ndarray, shape (terms, stages)
        n_k - d_k and d_k at the nominal values.
    corner_values : ndarray, shape (corners, elements, stages)
        The elements at each corner [ohm].
    corner_contrasts, corner_loadings : ndarray, shape (corners, terms, stages)
        n_k - d_k and d_k at each corner.
    corner_error : ndarray, shape (corners, stages)
        (ideal gain at the corner - reference)/reference.
    corner_terms : ndarray, shape (corners, elements, stages)
        Share of each element's tolerance in that; with `set_point` they sum to it.
    regular : ndarray of bool, shape (stages,)
        Whether, at every corner, all is finite, the ideal gain keeps its sign and the feedback is negative.
    matters : ndarray of bool, shape (departures, stages)
        Whether a departure, of any amplifier, has a coefficient that is not zero.
    """

    gain_ideal: FloatArray
    reference: FloatArray
    limits: FloatArray
    set_point: FloatArray
    contrasts: FloatArray
    loadings: FloatArray
    corner_values: FloatArray
    corner_contrasts: FloatArray
    corner_loadings: FloatArray
    corner_error: FloatArray
    corner_terms: FloatArray
    regular: NDArray[np.bool_]
    matters: NDArray[np.bool_]


@dataclass(frozen=True)
class PartSide:
    """What the kernel needs of some parts for one form.

    Attributes
    ----------
    nominal, worst : ndarray, shape (terms, parts)
        The products m_k at the nominal figures, and with every departure at its limit.
    evidence : ndarray of uint8, shape (departures, parts)
        What each limit rests on.
    """

    nominal: FloatArray
    worst: FloatArray
    evidence: NDArray[np.uint8]

    def part(self, parts: slice) -> PartSide:
        """Some of the parts."""
        return PartSide(self.nominal[:, parts], self.worst[:, parts], self.evidence[:, parts])


def term_names(form: Form) -> tuple[str, ...]:
    """Names of all terms of a row's account, in the order of every account: set-point, tolerances, departures."""
    return (SET_POINT, *(TOLERANCE.format(element) for element in form.elements), *form.terms)


def active_sets(form: Form) -> tuple[tuple[int, ...], ...]:
    """The sets of products m_k that are not 0 at some corner of the departures' box, each once, smallest first.

    Every amplifier's departures are taken for themselves: two amplifiers of one part number need not share
    their errors.
    """
    sets = set()
    for at_limit in product((False, True), repeat=len(form.departures)):
        sets.add(
            tuple(k for k, monomial in enumerate(form.monomials) if all(at_limit[departure] for departure in monomial))
        )
    return tuple(sorted(sets, key=lambda active: (len(active), active)))


def stage_side(form: Form, box: StageBox) -> StageSide:
    """Evaluate a form's coefficient functions for some stages, at the nominal values and at every corner.

    Raises
    ------
    InputError
        If more elements have a tolerance than can be visited corner by corner.
    """
    nominal = coefficients.evaluate(form, coefficients.at_dc(form, box.values))
    reference = np.where(np.isnan(box.targets), nominal.gain_ideal, box.targets)
    # At 0 Hz no tolerance of a capacitor or an inductor matters.
    is_resistor = np.array([kind == "resistor" for kind in form.kinds])
    toleranced = np.flatnonzero((box.tolerances > 0.0).any(axis=1) & is_resistor)
    if len(toleranced) > MOST_TOLERANCED_ELEMENTS:
        raise InputError(
            f"topology '{form.topology}': {len(toleranced)} elements of a stage have a tolerance; "
            f"at most {MOST_TOLERANCED_ELEMENTS} can be taken to every corner"
        )
    # Corner j has element toleranced[i] at its upper end if bit i of j is set.
    bits = np.arange(1 << len(toleranced))[:, None] >> np.arange(len(toleranced)) & 1
    values = np.repeat(box.values[None], len(bits), axis=0)
    ends = 1.0 + (2.0 * bits[:, :, None] - 1.0) * box.tolerances[toleranced]
    values[:, toleranced] *= ends

    at_corners = coefficients.evaluate(form, _pairs(form, values))
    shape = (len(bits), box.values.shape[1])
    corner_gain = at_corners.gain_ideal.reshape(shape)
    terms = _tolerance_terms(form, box.values, values, toleranced, reference)
    contrasts = np.moveaxis(at_corners.contrasts.reshape(-1, *shape), 0, 1).copy()
    loadings = np.moveaxis(at_corners.loadings.reshape(-1, *shape), 0, 1).copy()
    with np.errstate(invalid="ignore"):
        regular = (
            np.isfinite(contrasts).all(axis=(0, 1))
            & np.isfinite(loadings).all(axis=(0, 1))
            & np.isfinite(corner_gain).all(axis=0)
            & (np.sign(corner_gain) == np.sign(nominal.gain_ideal)).all(axis=0)
            & np.isfinite((corner_gain - reference) / reference).all(axis=0)
            & (loadings[:, list(form.loops())] >= 0.0).all(axis=(0, 1))
        )
        return StageSide(
            gain_ideal=nominal.gain_ideal,
            reference=reference,
            limits=box.limits,
            set_point=(nominal.gain_ideal - reference) / reference,
            contrasts=nominal.contrasts,
            loadings=nominal.loadings,
            corner_values=values,
            corner_contrasts=contrasts,
            corner_loadings=loadings,
            corner_error=(corner_gain - reference) / reference,
            corner_terms=terms,
            regular=regular,
            matters=_matters(form, contrasts, loadings),
        )


def part_side(form: Form, nominal: FloatArray, worst: FloatArray, evidence: NDArray[np.uint8]) -> PartSide:
    """The products m_k of some parts.

    Parameters
    ----------
    nominal, worst : ndarray, shape (departures, parts)
        The departures, in the order of `DEPARTURES`.
    evidence : ndarray of uint8, shape (departures, parts)
        What `worst` rests on.
    """
    place = {departure.symbol: index for index, departure in enumerate(DEPARTURES)}
    kinds = [place[symbol] for _, symbol in form.departures]

    def products(values: FloatArray) -> FloatArray:
        found = np.ones((len(form.monomials), values.shape[1]))
        for k, monomial in enumerate(form.monomials):
            for departure in monomial:
                found[k] *= values[kinds[departure]]
        return found

    return PartSide(products(nominal), products(worst), evidence)


def _pairs(form: Form, values: FloatArray) -> coefficients.Pairs:
    """Pairs of the elements at all corners, corners and stages on one axis."""
    return coefficients.at_dc(form, np.moveaxis(values, 1, 0).reshape(values.shape[1], -1))


def _tolerance_terms(
    form: Form,
    nominal: FloatArray,
    values: FloatArray,
    toleranced: NDArray[np.intp],
    reference: FloatArray,
) -> FloatArray:
    """Share of each element's tolerance in the ideal gain's error at each corner.

    The elements are moved from nominal to the corner one after the other, once in their order and once in the
    reverse order, and each gets the mean of its two steps. The shares sum to the whole exactly, and two
    elements that play the same part get the same share.

    Returns
    -------
    ndarray, shape (corners, elements, stages)
    """
    shares = np.zeros_like(values)
    for order in (list(toleranced), list(reversed(toleranced))):
        moved = np.repeat(nominal[None], len(values), axis=0)
        before = coefficients.gain_ideal(form, _pairs(form, moved)).reshape(len(values), -1)
        for element in order:
            moved[:, element] = values[:, element]
            after = coefficients.gain_ideal(form, _pairs(form, moved)).reshape(len(values), -1)
            with np.errstate(invalid="ignore"):
                shares[:, element] += (after - before) / reference / 2.0
            before = after
    return shares


def _matters(form: Form, contrasts: FloatArray, loadings: FloatArray) -> NDArray[np.bool_]:
    used = (contrasts != 0.0).any(axis=0) | (loadings != 0.0).any(axis=0)
    matters = np.zeros((len(DEPARTURES), contrasts.shape[2]), dtype=bool)
    for index, departure in enumerate(DEPARTURES):
        for k, monomial in enumerate(form.monomials):
            if any(form.departures[i][1] == departure.symbol for i in monomial):
                matters[index] |= used[k]
    return matters
