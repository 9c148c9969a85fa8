"""A bad topology is told so, precisely."""

from __future__ import annotations

from pathlib import Path

import pytest

import oracle
from gainassay.errors import InputError
from gainassay.forms import library, soundness
from gainassay.forms.form import derive
from gainassay.forms.topology import Topology

GOOD = """
topology = "{name}"
summary = "A stage of a test"
gain = "{gain}"
input = {input}
output = "{output}"
[elements]
r1 = {{ kind = "resistor", between = ["in", "sum"] }}
r2 = {{ kind = "resistor", between = ["sum", "out"] }}
{more}
[amplifiers.u1]
plus = "{plus}"
minus = "{minus}"
out = "{out}"
"""
DEFAULTS = {
    "name": "test",
    "gain": "voltage",
    "input": '"in"',
    "output": "out",
    "more": "",
    "plus": "ground",
    "minus": "sum",
    "out": "out",
}


def written(folder: Path, **changes: str) -> Path:
    path = folder / "stage.toml"
    path.write_text(GOOD.format(**{**DEFAULTS, **changes}), encoding="utf-8")
    return path


def resistor(name: str, first: str, second: str) -> str:
    return f'{name} = {{ kind = "resistor", between = ["{first}", "{second}"] }}'


def checked(topology: Topology) -> None:
    soundness.network(topology)
    soundness.function(topology, derive(topology))


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        ({"input": '"ground"'}, "the input is ground"),
        ({"input": '["in", "in"]'}, "both nodes of the input pair are 'in'"),
        ({"output": "elsewhere"}, "the output 'elsewhere' is no node of it; the nodes are in, sum, out"),
        ({"output": "in"}, "input and output are the same node, 'in'"),
        ({"plus": "sum"}, "both inputs of u1 are node 'sum'"),
        ({"out": "ground"}, "the output of u1 is tied to ground"),
        ({"out": "in"}, "the output of u1 is tied to the input 'in'"),
        ({"more": resistor("r3", "sum", "sum")}, "r3 joins node 'sum' to itself"),
        ({"more": resistor("tol_pct", "sum", "out")}, "an element cannot be called 'tol_pct'"),
        ({"more": resistor("r1_tol_pct", "sum", "out")}, "an element cannot be called 'r1_tol_pct'"),
        ({"more": resistor("r_o", "sum", "out")}, "an element cannot be called 'r_o'"),
        ({"more": resistor("u1", "sum", "out")}, "an element and an amplifier are both called 'u1'"),
        ({"gain": "transconductance"}, "'out' is none of its elements"),
        ({"gain": "power"}, 'gain is \'power\'; wanted is "voltage", "transresistance"'),
        ({"name": "__import__('os').system('x')"}, "wanted is a name of lower-case letters"),
        ({"more": resistor("eval('1')", "sum", "out").replace("eval('1')", '"eval(1)"')}, "'eval(1)' is no name"),
        ({"more": 'r3 = { kind = "resistor", betwen = ["a", "b"] }'}, "did you mean 'between'?"),
        ({"more": 'r3 = { kind = "resistor", between = ["a"] }'}, "elements.r3.between"),
        ({"more": 'r3 = { kind = "diode", between = ["sum", "out"] }'}, "elements.r3.kind is 'diode'"),
    ],
)
def test_statement(tmp_path: Path, changes: dict[str, str], message: str) -> None:
    with pytest.raises(InputError) as raised:
        library.read(written(tmp_path, **changes))
    assert message in str(raised.value)
    assert "stage.toml" in str(raised.value)


INVERTING = {"r1": ("in", "sum"), "r2": ("sum", "out")}
STAGE = ("ground", "sum", "out")
BAD_NETWORKS = [
    ({**INVERTING, "r3": ("out", "loose")}, [STAGE], "node 'loose' is joined to r3 alone"),
    ({**INVERTING, "r3": ("p", "q"), "r4": ("q", "p")}, [STAGE], "nothing joins 'p', 'q' to ground"),
    (
        {"r1": ("in", "sum"), "r2": ("sum", "ground"), "r3": ("out", "ground")},
        [STAGE],
        "no feedback: nothing leads from the output of u1 back to its inputs",
    ),
    ({**INVERTING, "r3": ("in", "ground")}, [STAGE], "r3 never influences the gain"),
    (
        {**INVERTING, "r3": ("ground", "b"), "r4": ("b", "c")},
        [STAGE, ("ground", "b", "c")],
        "never influences the gain",
    ),
    (INVERTING, [("sum", "ground", "out")], "the feedback around u1 is positive for all element values"),
    (
        {"r1": ("in", "a"), "r2": ("a", "mid"), "r3": ("mid", "b"), "r4": ("b", "out")},
        [("ground", "a", "mid"), ("b", "ground", "out")],
        "the feedback around u2 is positive",
    ),
    (
        {"r1": ("in", "ground"), "r2": ("sum", "out"), "r3": ("sum", "ground")},
        [STAGE],
        "the ideal gain is zero",
    ),
    (
        {"r1": ("in", "plus"), "r2": ("plus", "ground"), "r3": ("plus", "out")},
        [("plus", "sum", "out")],
        "node 'sum' is joined to u1.minus alone",
    ),
]


@pytest.mark.parametrize(("elements", "amplifiers", "message"), BAD_NETWORKS, ids=[m for *_, m in BAD_NETWORKS])
def test_network_and_function(
    elements: dict[str, tuple[str, str]], amplifiers: list[tuple[str, str, str]], message: str
) -> None:
    with pytest.raises(InputError) as raised:
        checked(oracle.network(elements, amplifiers))
    assert message in str(raised.value)


def test_inputs_exchanged_leave_the_ideal_gain_and_are_told_all_the_same() -> None:
    right = derive(oracle.network(INVERTING, [STAGE]))
    wrong = derive(oracle.network(INVERTING, [("sum", "ground", "out")]))
    assert right.gain_ideal == wrong.gain_ideal
    assert [soundness.sign(right.loadings[place]) for place in right.loops()] == [1]
    assert [soundness.sign(wrong.loadings[place]) for place in wrong.loops()] == [-1]


def test_feedback_that_depends_on_the_values_is_left_to_the_stage() -> None:
    both_ways = oracle.network(
        {"r1": ("in", "plus"), "r2": ("plus", "out"), "r3": ("minus", "out"), "r4": ("minus", "ground")},
        [("plus", "minus", "out")],
    )
    checked(both_ways)
    form = derive(both_ways)
    assert [soundness.sign(form.loadings[place]) for place in form.loops()] == [0]


@pytest.mark.parametrize("topology", library.library().values(), ids=library.library())
def test_the_library_is_sound(topology: Topology) -> None:
    checked(topology)


def test_a_dense_mesh_is_refused_at_once() -> None:
    nodes = ["in", "out", *(f"n{i}" for i in range(6)), "ground"]
    pairs = [(a, b) for i, a in enumerate(nodes) for b in nodes[i + 1 :]]
    mesh = oracle.network({f"r{i}": pair for i, pair in enumerate(pairs)}, [("ground", "n0", "out")])
    with pytest.raises(InputError, match="meshed too densely"):
        derive(mesh)


def test_at_most_three_amplifiers(tmp_path: Path) -> None:
    more = "\n".join(f'[amplifiers.u{i}]\nplus = "ground"\nminus = "a{i}"\nout = "b{i}"' for i in range(2, 5))
    path = written(tmp_path)
    path.write_text(path.read_text(encoding="utf-8") + more, encoding="utf-8")
    with pytest.raises(InputError, match="it has 4 amplifiers; a stage has 3 at most"):
        library.read(path)
