"""Formulas of gain, impedances and return ratios: proved, numerically right, and as short as hoped."""

from __future__ import annotations

import json
import os
import random
import re
import subprocess
import sys
from dataclasses import replace
from pathlib import Path

import mpmath
import pytest

import oracle
from forms import networks
from gainassay.errors import InputError
from gainassay.forms import nodal
from gainassay.forms.evaluation import value
from gainassay.forms.library import library
from gainassay.forms.meaningful import Formulas, Stated, derive, gain_formula, quantities
from gainassay.forms.proof import ProofError, prove
from gainassay.forms.render import text
from gainassay.forms.topology import Element, Topology

LIBRARY = library()

STAGES = networks.UNSEEN


def solved(topology: Topology, values: networks.Values, formula: Stated) -> mpmath.mpf:
    """The same by the solver."""
    match formula.symbol:
        case "gain":
            return networks.gain(topology, values)
        case "z_in":
            return networks.input_impedance(topology, values)
        case "z_out":
            return networks.output_impedance(topology, values)
        case symbol if symbol.startswith("z_"):
            return networks.input_impedance_at(topology, values, symbol.removeprefix("z_"))
        case _:
            return networks.return_ratio(topology, values, formula.meaning.split()[-1])


def check_against_solver(topology: Topology, formulas: Formulas, rng: random.Random) -> None:
    with mpmath.workdps(networks.DIGITS):
        values, s = networks.random_values(topology, rng), mpmath.mpc(3, 700) / 10**6
        impedances = networks.impedances(topology, values, s)
        for formula in formulas.stated()[1:]:
            expected, found = solved(topology, impedances, formula), value(formula.expression, values, s)
            assert abs(found - expected) <= abs(expected) * mpmath.mpf(10) ** -30, formula.symbol


def test_inverting() -> None:
    gain = derive(LIBRARY["inverting"], {"r_source": "short"}).gain
    assert text(gain.whole) == (
        "-(r2/r1)(1 - r_o/(A r2))/(1 + (1/A)(1 + r2/(r1 || r_id))(1 + r_o/(r_load || (r2 + r1 || r_id))))"
    )


def test_non_inverting() -> None:
    gain = derive(LIBRARY["non_inverting"], {"r_source": "short"}).gain
    assert text(gain.ideal) == "1 + r2/r1"
    assert text(gain.numerator) == "1 + r_o/(A r_id (1 + r2/r1))"
    assert text(gain.denominator) == ("1 + (1/A)(1 + r2/(r1 || r_id))(1 + r_o/(r_load || (r2 + r1 || r_id)))")


def test_non_inverting_with_source_resistance() -> None:
    gain = derive(LIBRARY["non_inverting_source"], {"r_shunt": "open"}).gain
    assert text(gain.denominator) == (
        "1 + (1/A)(1 + r_source/r_id)(1 + r2/(r1 || (r_source + r_id)))"
        "(1 + r_o/(r_load || (r2 + r1 || (r_source + r_id))))"
    )


def test_inverting_with_t_feedback() -> None:
    gain = derive(LIBRARY["inverting_t"], {"r_source": "short"}).gain
    assert text(gain.ideal) == "-(r4/r1)(1 + r2/(r3 || r4))"
    assert text(gain.numerator) == "1 - r_o/(A r4 (1 + r2/(r3 || r4)))"
    assert text(gain.denominator) == (
        "1 + (1/A)(1 + r4/r3)(1 + (r2 + r3 || r4)/(r1 || r_id))(1 + r_o/(r_load || (r4 + r3 || (r2 + r1 || r_id))))"
    )


def test_bridged_t_feedback_is_an_effective_feedback_resistance() -> None:
    gain = derive(STAGES["bridged T feedback"]).gain
    assert text(gain.ideal) == "-(r5 || r4 (1 + r2/(r3 || r4)))/r1"


def test_cascade_is_a_product_of_stages() -> None:
    gain = derive(STAGES["cascade with interstage loading"]).gain
    assert text(gain.ideal) == "-(r4/r3)(1 + r2/r1)"
    assert text(gain.numerator) == "(1 + r_o_u1/(A_u1 r_id_u1 (1 + r2/r1)))(1 - r_o_u2/(A_u2 r4))"


def test_impedances_are_in_blackmans_form() -> None:
    formulas = derive(LIBRARY["inverting"], {"r_source": "short"})
    seen = formulas.input_impedance
    assert seen is not None
    assert text(seen.dead) == "r1 + r_id || (r2 + r_load || r_o)"
    assert text(seen.shorted) == "1 + A/((1 + r2/(r1 || r_id))(1 + r_o/(r_load || (r2 + r1 || r_id))))"
    assert text(seen.opened) == "1 + A/((1 + r2/r_id)(1 + r_o/(r_load || (r2 + r_id))))"
    ((name, ratio),) = formulas.return_ratios
    assert (name, text(ratio)) == ("u1", "A/((1 + r2/(r1 || r_id))(1 + r_o/(r_load || (r2 + r1 || r_id))))")


def test_output_resistance_joins_what_it_is_in_series_with() -> None:
    formulas = derive(LIBRARY["inverting"], {"r_source": "short", "r_load": "open"})
    assert text(formulas.gain.denominator) == "1 + (1/A)(1 + (r2 + r_o)/(r1 || r_id))"


def test_reactive_elements_are_elements_like_others() -> None:
    integrator = _with_kinds(
        oracle.network({"r1": ("in", "sum"), "r2": ("sum", "out"), "c1": ("sum", "out")}, [("ground", "sum", "out")]),
        c1="capacitor",
    )
    gain = derive(integrator).gain
    assert text(gain.ideal) == "-(r2 || 1/(s c1))/r1"
    differentiator = _with_kinds(
        oracle.network({"r1": ("in", "a"), "c1": ("a", "sum"), "r2": ("sum", "out")}, [("ground", "sum", "out")]),
        c1="capacitor",
    )
    assert text(derive(differentiator).gain.ideal) == "-r2/(r1 + 1/(s c1))"
    lossless = _with_kinds(
        oracle.network({"l1": ("in", "sum"), "c1": ("sum", "out")}, [("ground", "sum", "out")]),
        c1="capacitor",
        l1="inductor",
    )
    assert text(derive(lossless).gain.ideal) == "-1/(s^2 c1 l1)"


def _with_kinds(topology: Topology, **kinds: str) -> Topology:
    elements = tuple(Element(e.name, kinds.get(e.name, e.kind), e.between, e.absent) for e in topology.elements)
    return replace(topology, elements=elements)


@pytest.mark.oracle
@pytest.mark.parametrize("name", LIBRARY)
def test_library_against_a_nodal_solve(name: str) -> None:
    check_against_solver(LIBRARY[name], derive(LIBRARY[name]), random.Random(name))


@pytest.mark.oracle
@pytest.mark.parametrize("name", STAGES)
def test_stages_against_a_nodal_solve(name: str) -> None:
    check_against_solver(STAGES[name], derive(STAGES[name]), random.Random(name))


@pytest.mark.oracle
@pytest.mark.parametrize(("amplifiers", "seeds"), [(1, 60), (2, 40), (3, 30)])
def test_random_networks_against_a_nodal_solve(amplifiers: int, seeds: int) -> None:
    derived = 0
    for seed in range(seeds):
        rng = random.Random(1000 * amplifiers + seed)
        topology = networks.random_network(rng, amplifiers)
        try:
            formulas = derive(topology)
        except InputError:  # no ideal gain
            continue
        check_against_solver(topology, formulas, rng)
        derived += 1
    assert derived > seeds / 6


@pytest.mark.oracle
def test_reactive_elements_against_a_nodal_solve() -> None:
    topology = _with_kinds(STAGES["bridged T feedback"], r3="capacitor", r5="inductor")
    formula = derive(topology).gain.whole
    with mpmath.workdps(networks.DIGITS):
        values = networks.random_values(topology, random.Random(1))
        s = mpmath.mpc(3, 700)
        expected = networks.gain(topology, networks.impedances(topology, values, s))
        assert abs(value(formula, values, s) - expected) < abs(expected) * mpmath.mpf(10) ** -40


@pytest.mark.parametrize("name", LIBRARY)
def test_absent_elements_are_left_out(name: str) -> None:
    topology = LIBRARY[name]
    absent = {element.name: element.absent for element in topology.elements if element.absent != "error"}
    formulas = derive(topology, absent)
    for formula in formulas.stated():
        assert not absent.keys() & set(re.findall(r"\w+", text(formula.expression)))
    values = {element.name: 1e3 * 1.7**i for i, element in enumerate(topology.elements)}
    amplifiers = formulas.quantities[len(topology.elements) :]
    values |= {q.name: {"open_loop_gain": 1e5, "input_resistance": 1e6}.get(q.kind, 50.0) for q in amplifiers}
    full = gain_formula(nodal.derive(topology), quantities(topology)).whole
    with mpmath.workdps(100):
        tiny, s = mpmath.mpf("1e-40"), mpmath.mpf("1e-4")
        is_large = {e.name: (e.absent == "open") != (e.kind == "capacitor") for e in topology.elements}
        nearly = {name: 1 / tiny if is_large[name] else tiny for name in absent}
        exact = {name: mpmath.mpf(number) for name, number in values.items()}
        found, expected = value(formulas.gain.whole, exact, s), value(full, exact | nearly, s)
        assert abs(found - expected) < abs(expected) * mpmath.mpf("1e-25")


def test_a_wrong_formula_is_not_proved() -> None:
    topology = LIBRARY["inverting"]
    gain, formulas = nodal.derive(topology), derive(topology)
    count = len(formulas.quantities)
    prove(formulas.gain.whole, gain.numerator, gain.denominator, count)
    with pytest.raises(ProofError):
        prove(formulas.gain.ideal, gain.numerator, gain.denominator, count)
    with pytest.raises(ProofError):
        prove(formulas.gain.whole, -gain.numerator, gain.denominator, count)


@pytest.mark.parametrize("name", STAGES)
def test_formulas_survive_json(name: str) -> None:
    formulas = derive(STAGES[name])
    assert Formulas.from_tree(json.loads(json.dumps(formulas.to_tree()))) == formulas


def test_a_notebook_shows_formulas() -> None:
    formulas = derive(LIBRARY["follower"])
    assert formulas._repr_latex_().startswith(r"$\displaystyle")
    assert r"z_{\mathrm{out}} &= \frac" in formulas._repr_latex_()
    assert formulas._repr_html_().count("<math") == len(formulas.stated())


def test_a_stage_without_ideal_gain_is_refused() -> None:
    open_loop = oracle.network({"r1": ("in", "minus"), "r2": ("out", "ground")}, [("ground", "minus", "out")])
    with pytest.raises(InputError, match="ideal gain"):
        derive(open_loop)


def test_names_are_never_run_as_code(tmp_path: Path) -> None:
    trace = tmp_path / "trace"
    evil = f"__import__('pathlib').Path({str(trace)!r}).touch()"
    network = oracle.network({evil: ("in", "sum"), "lambda": ("sum", "out")}, [("ground", "sum", "out")])
    assert text(derive(network).gain.ideal) == f"-lambda/{evil}"
    assert not trace.exists()


def test_an_amplifiers_quantity_keeps_its_name_apart() -> None:
    network = oracle.network({"r_id": ("in", "sum"), "r_o_u1": ("sum", "out")}, [("ground", "sum", "out")])
    assert [quantity.name for quantity in quantities(network)] == ["r_id", "r_o_u1", "u1.A", "u1.r_id", "u1.r_o"]


def test_formulas_do_not_depend_on_the_hash_seed() -> None:
    program = (
        "from gainassay.forms.library import library\n"
        "from gainassay.forms.meaningful import derive\n"
        "for name in ('difference', 'inverting_t', 'non_inverting_source'): print(derive(library()[name]))\n"
    )

    def run(seed: str) -> str:
        environment = os.environ | {"PYTHONHASHSEED": seed, "PYTHONPATH": os.pathsep.join(sys.path)}
        command = [sys.executable, "-c", program]
        return subprocess.run(command, env=environment, capture_output=True, text=True, check=True).stdout

    assert run("1") == run("2") == run("77")
