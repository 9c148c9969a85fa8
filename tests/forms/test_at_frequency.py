"""Coefficient functions at a frequency against an independent complex solve at 60 digits."""

from __future__ import annotations

import random

import mpmath
import numpy as np
import pytest

import oracle
from gainassay.forms import coefficients
from gainassay.forms.form import derive
from gainassay.forms.library import library
from gainassay.forms.topology import Topology

LIBRARY = library()
POINTS = 12


@pytest.mark.oracle
@pytest.mark.parametrize("topology", LIBRARY.values(), ids=LIBRARY)
def test_complex_gain(topology: Topology) -> None:
    """The complex error of a part at a random frequency, to 1e-9 of the sum of its addends."""
    rng = random.Random(f"{topology.name} at a frequency")
    form = derive(topology)
    symbols = [symbol for _, symbol in form.departures]
    for _ in range(POINTS):
        hertz = 10.0 ** rng.uniform(0, 7)
        values = oracle.random_values(topology, rng, hertz)
        a_ol, r_id, r_o, gbw, pole = (
            10.0 ** rng.uniform(*decades) for decades in ((2, 8), (4, 12), (-1, 3), (4, 8), (6, 9))
        )
        ohms = oracle.impedances(topology, values, hertz)
        with mpmath.workdps(oracle.DIGITS):
            ideal = oracle.gain(topology, ohms, oracle.IDEAL)
            part = oracle.part_at(hertz, a_ol, r_id, r_o, gbw, pole)
            error = complex(oracle.gain(topology, ohms, part) / ideal - 1)
        at = np.array([[values[name]] for name in form.elements])
        found = coefficients.evaluate(form, coefficients.at_frequency(form, at, np.array([hertz])))
        inverse = complex(1.0 / a_ol, hertz / gbw) * complex(1.0, hertz / pole)
        departing = {"a": inverse, "g_id": 1.0 / r_id, "r_o": r_o}
        products = np.array([np.prod([departing[symbols[i]] for i in monomial]) for monomial in form.monomials])
        terms = found.contrasts[:, 0] * products / (1.0 + (found.loadings[:, 0] * products).sum())
        assert abs(found.gain_ideal[0] / complex(ideal) - 1.0) <= 1e-12, (values, hertz)
        assert abs(terms.sum() - error) <= 1e-9 * np.abs(terms).sum(), (values, hertz)


@pytest.mark.parametrize("topology", LIBRARY.values(), ids=LIBRARY)
def test_polynomials_in_s_are_the_coefficient_functions(topology: Topology) -> None:
    rng, form = random.Random(f"{topology.name} in s"), derive(topology)
    values = [oracle.random_values(topology, rng, 1e3) for _ in range(3)]
    at = np.array([[one[name] for one in values] for name in form.elements])
    which, hertz = np.array([2, 0, 1, 2]), np.array([1e3, 27.0, 4e4, 3e3])
    found = coefficients.in_s(form, at).at(which, hertz)
    expected = coefficients.evaluate(form, coefficients.at_frequency(form, at[:, which], hertz))
    for name, wanted in vars(expected).items():
        np.testing.assert_allclose(getattr(found, name), wanted, rtol=1e-9, atol=1e-12 * np.abs(wanted).max())


@pytest.mark.oracle
@pytest.mark.parametrize("name", ["low_pass_2", "differentiator", "inverting_coil"])
def test_slopes(name: str) -> None:
    """Slopes in the logarithm of an impedance against differences."""
    form, rng, step = derive(LIBRARY[name]), random.Random(name), 1e-6
    values = np.array([[oracle.random_values(LIBRARY[name], rng, 1e3)[element]] for element in form.elements])
    hertz = np.array([1e3])
    slopes = coefficients.slopes(form, coefficients.at_frequency(form, values, hertz))
    for place, kind in enumerate(form.kinds):
        ends = []
        for factor in (1.0 - step, 1.0 + step):
            moved = values.copy()
            moved[place] *= 1.0 / factor if kind == "capacitor" else factor
            ends.append(coefficients.evaluate(form, coefficients.at_frequency(form, moved, hertz)))
        low, high = ends
        assert slopes.gain_ideal[place, 0] == pytest.approx(
            np.log(high.gain_ideal[0] / low.gain_ideal[0]) / (2.0 * step), rel=1e-6, abs=1e-7
        )
        np.testing.assert_allclose(
            slopes.loadings[place, :, 0], (high.loadings - low.loadings)[:, 0] / (2.0 * step), rtol=1e-6, atol=1e-4
        )
