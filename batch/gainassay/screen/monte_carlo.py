"""The error of each pair in samples: what share of a production stays inside the limit, after JCGM 101.

Every quantity is drawn as `rss` takes it: independent of all others and rectangular between its ends. A stage's samples
follow from its name and the seed alone, and so do a part's: no bit depends on other rows or on how pairs are cut. So
one stage meets all parts with the same samples, which makes their yields comparable.

A pair whose worst case is inside the limit needs no samples: all of its box is.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from hashlib import sha256

import numpy as np
from numpy.typing import NDArray

from gainassay.contracts.moves import MOVES
from gainassay.forms import coefficients
from gainassay.forms.coefficients import FloatArray
from gainassay.forms.form import Form
from gainassay.screen.boxes import Range, StageBox, of_members, product
from gainassay.screen.corners import by_amplifier, monomials
from gainassay.screen.kernel import add_products

SEED = 101
"""Of all samples. Part of the output format: another seed gives other yields, inside their uncertainty."""

NUMBERS_PER_STRIP = 4_000_000
"""Of the samples of some stages, kept at a time while all parts are met: 32 megabytes; no bit depends on it."""

SAMPLES_PER_BLOCK = 32_768
"""Of pairs, evaluated at a time: few enough to stay in the cache; no bit depends on it."""


@dataclass(frozen=True)
class Lot:
    """Stages and parts of one form, of which samples are drawn.

    Attributes
    ----------
    box : StageBox
        The stages at 0 Hz, their targets the gains that errors refer to.
    limits : ndarray, shape (departures, parts)
        The departures at their limits, in the order of `DEPARTURES`.
    """

    form: Form
    box: StageBox
    stage_names: NDArray[np.str_]
    part_names: NDArray[np.str_]
    limits: FloatArray


@dataclass(frozen=True)
class StageSamples:
    """Samples of some stages.

    Attributes
    ----------
    error : ndarray, shape (stages, samples)
        Of the ideal gain.
    contrasts, loadings : ndarray, shape (terms, stages, samples)
        n_k - d_k and d_k.
    """

    error: FloatArray
    contrasts: FloatArray
    loadings: FloatArray


def uniform(kind: str, name: str, shape: tuple[int, ...]) -> FloatArray:
    """Numbers between 0 and 1 that follow from the seed, a kind and a name.

    Drawn as raw bits of a generator whose stream no later release of its library may change.
    """
    seed = int.from_bytes(sha256(f"{SEED} {kind} {name}".encode()).digest()[:16], "little")
    bits = np.random.PCG64DXSM(seed).random_raw(int(np.prod(shape)))
    return np.asarray((bits >> np.uint64(11)).view(np.int64) * 2.0**-53, np.float64).reshape(shape)


def stage_samples(lot: Lot, rows: NDArray[np.intp], samples: int) -> StageSamples:
    """Samples of some of the stages."""
    terms, shape = len(lot.form.monomials), (len(rows), samples)
    found = StageSamples(np.empty(shape), np.empty((terms, *shape)), np.empty((terms, *shape)))
    for place, row in enumerate(rows.tolist()):
        box = lot.box.part(slice(row, row + 1))
        values = _elements(box, str(lot.stage_names[row]), samples)
        at = coefficients.evaluate(lot.form, coefficients.at_dc(lot.form, values))
        found.error[place] = (at.gain_ideal - box.targets) / box.targets
        found.contrasts[:, place], found.loadings[:, place] = at.contrasts, at.loadings
    return found


def _elements(box: StageBox, name: str, samples: int) -> FloatArray:
    """Samples of the elements of one stage; shape (elements, samples)."""
    elements, networks = len(box.values), box.common.low.shape[1]
    # Networks come last: how many there are room for depends on other stages.
    drawn = uniform("stage", name, (elements + networks, len(MOVES), samples)).swapaxes(0, 1)
    together = of_members(np.repeat(box.network, samples, axis=1), _between(box.common, drawn[:, elements:]))
    return box.values * product(_between(box.own, drawn[:, :elements])) * product(together)


def _between(ends: Range, shares: FloatArray) -> FloatArray:
    return np.asarray(ends.low + (ends.high - ends.low) * shares)


def part_samples(lot: Lot, columns: NDArray[np.intp], samples: int) -> FloatArray:
    """Samples of the products m_k of some of the parts; shape (terms, parts, samples)."""
    form = lot.form
    drawn = [uniform("part", name, (len(form.departures), samples)) for name in lot.part_names[columns].tolist()]
    shares = np.stack(drawn, axis=1)
    for up, *down in form.figures():
        if down:  # one number of either sign, in two symbols of which one is 0
            signed = 2.0 * shares[up] - 1.0
            shares[up], shares[down] = np.maximum(signed, 0.0), np.maximum(-signed, 0.0)
    limits = by_amplifier(form, lot.limits[:, columns])
    return monomials(form, limits[:, :, None] * shares)


def errors(stages: StageSamples, place: int, products: FloatArray) -> FloatArray:
    """Samples of the error of one of the stages with some parts; shape (parts, samples)."""
    numerator, denominator = np.zeros(products.shape[1:]), np.ones(products.shape[1:])
    add_products(stages.contrasts[:, place, None], stages.loadings[:, place, None], products, numerator, denominator)
    error = stages.error[place]
    numerator /= denominator
    numerator *= 1.0 + error
    numerator += error
    return numerator


def errors_of_first(lot: Lot, samples: int) -> FloatArray:
    """Samples of the error of the first stage with the first part; shape (samples,)."""
    first = np.zeros(1, np.intp)
    return errors(stage_samples(lot, first, samples), 0, part_samples(lot, first, samples)).reshape(samples)


def inside(lot: Lot, undecided: NDArray[np.bool_], samples: int) -> NDArray[np.int64]:
    """How many samples of each pair are inside the stage's limit.

    Parameters
    ----------
    undecided : ndarray of bool, shape (stages, parts)
        Which pairs to sample; the others count none.
    samples : int
        Of each pair.
    """
    found = np.zeros(undecided.shape, np.int64)
    per_stage = samples * (2 * len(lot.form.monomials) + 1)
    for rows in some(np.logical_or.reduce(undecided, axis=1), NUMBERS_PER_STRIP // per_stage):
        stages = stage_samples(lot, rows, samples)
        for columns in some(np.logical_or.reduce(undecided[rows], axis=0), SAMPLES_PER_BLOCK // samples):
            products = part_samples(lot, columns, samples)
            for place, row in enumerate(rows.tolist()):
                here = undecided[row, columns]
                if here.any():
                    error = errors(stages, place, products if here.all() else products[:, here])
                    found[row, columns[here]] = (np.abs(error) <= lot.box.limits[row]).sum(axis=1)
    return found


def some(wanted: NDArray[np.bool_], count: int) -> Iterator[NDArray[np.intp]]:
    """The places that are wanted, some at a time."""
    places = np.flatnonzero(wanted)
    step = max(1, count)
    for start in range(0, len(places), step):
        yield places[start : start + step]
