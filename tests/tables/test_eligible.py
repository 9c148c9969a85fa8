"""Which parts may serve which stages: every relation, what is blank, text, bad cells, and whole runs by brute force."""

from __future__ import annotations

import json
import random
from collections import Counter
from collections.abc import Callable, Mapping, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from gainassay import job as jobs
from gainassay import service
from gainassay.errors import InputError
from gainassay.screen import blocks
from gainassay.service import Prepared

if TYPE_CHECKING:
    from conftest import CommandLineHere, JobWriter

from conftest import PART, STAGE

Row = Mapping[str, str]


def rule(part: str, relation: str, stage: str, name: str = "") -> str:
    """A rule as a job writes it; columns as TOML."""
    return f"[[eligible]]\npart = {part}\n{relation} = {stage}\n" + (f'name = "{name}"\n' if name else "")


def prepared(write_job: JobWriter, rules: str, stages: Sequence[Row], parts: Sequence[Row]) -> Prepared:
    """A job of inverting stages and good parts, named in order, with these cells besides."""
    return service.prepare(
        write_job(
            rules,
            stages=[{**STAGE, "stage": f"s{n:03}", **row} for n, row in enumerate(stages)],
            parts=[{**PART, "part": f"p{n:03}", **row} for n, row in enumerate(parts)],
        )
    )


def eligible(found: Prepared) -> list[list[bool]]:
    """Whether each part may serve each stage, a list for each stage of the one topology."""
    pattern, parts = found.eligibility[0].patterns()
    whole: list[list[bool]] = parts[pattern].tolist()
    return whole


@pytest.mark.parametrize(
    ("relation", "stage", "part", "wanted"),
    [
        # Ends are inside.
        ("at_least", "2", "2", True),
        ("at_least", "2", "2.0000000001", True),
        ("at_least", "2", "1.9999999999", False),
        ("at_least", "-1e3", "-999", True),
        ("at_least", "10", "9", False),
        ("at_most", "2", "2", True),
        ("at_most", "2", "1.9", True),
        ("at_most", "2", "2.1", False),
        ("equals", "2", "2.0", True),
        ("equals", "2e0", " 2 ", True),
        ("equals", "2", "2.1", False),
        ("equals", "0", "-0", True),
        ("equals", "SO-8", " SO-8 ", True),
        ("equals", "SO-8", "so-8", False),
        ("equals", "2", "2 wide", False),
        # Blank: the stage asks for nothing; what the part offers is not known.
        *((relation, "", part, True) for relation in ("at_least", "at_most", "equals") for part in ("", "2", " ")),
        *((relation, "2", "", False) for relation in ("at_least", "at_most", "equals")),
        ("equals", "SO-8", "", False),
    ],
)
def test_a_column_against_a_column(write_job: JobWriter, relation: str, stage: str, part: str, wanted: bool) -> None:
    rules = rule('"has"', relation, '"asks"')
    assert eligible(prepared(write_job, rules, [{"asks": stage}], [{"has": part}])) == [[wanted]]


@pytest.mark.parametrize(
    ("low", "high", "part", "wanted"),
    [
        ("1", "3", "1", True),
        ("1", "3", "3", True),
        ("1", "3", "0.9", False),
        ("1", "3", "3.1", False),
        ("1", "1", "1", True),
        ("1", "3", "", False),
        ("", "3", "-5", True),
        ("", "3", "4", False),
        ("1", "", "5", True),
        ("1", "", "", False),
        ("", "", "", True),
    ],
)
def test_a_number_within_a_range(write_job: JobWriter, low: str, high: str, part: str, wanted: bool) -> None:
    rules = rule('"has"', "within", '["low", "high"]')
    assert eligible(prepared(write_job, rules, [{"low": low, "high": high}], [{"has": part}])) == [[wanted]]


@pytest.mark.parametrize(
    ("asked", "offered", "wanted"),
    [
        (("-40", "85"), ("-40", "85"), True),
        (("-40", "85"), ("-55", "125"), True),
        (("-40", "85"), ("-39", "125"), False),
        (("-40", "85"), ("-55", "84"), False),
        (("-40", "85"), ("", "125"), False),
        (("-40", "85"), ("-55", ""), False),
        (("", "85"), ("", "125"), True),
        (("-40", ""), ("-55", ""), True),
        (("", ""), ("", ""), True),
    ],
)
def test_a_range_covers_a_range(
    write_job: JobWriter, asked: tuple[str, str], offered: tuple[str, str], wanted: bool
) -> None:
    rules = rule('["from", "to"]', "covers", '["t_from", "t_to"]')
    stage, part = dict(zip(("t_from", "t_to"), asked, strict=True)), dict(zip(("from", "to"), offered, strict=True))
    assert eligible(prepared(write_job, rules, [stage], [part])) == [[wanted]]


@pytest.mark.parametrize(
    ("asked", "wanted"), [("3", True), ("5", True), ("5.5", True), ("2.9", False), ("6", False), ("", True)]
)
def test_a_range_covers_a_number(write_job: JobWriter, asked: str, wanted: bool) -> None:
    rules = rule('["low", "high"]', "covers", '"supply"')
    assert eligible(prepared(write_job, rules, [{"supply": asked}], [{"low": "3", "high": "5.5"}])) == [[wanted]]


def test_a_cell_means_the_same_whatever_stands_in_the_others(write_job: JobWriter) -> None:
    rules = rule('"has"', "equals", '"asks"')
    found = prepared(write_job, rules, [{"asks": "8"}, {"asks": "SO-8"}], [{"has": "8.0"}, {"has": "SO-8"}, {}])
    assert eligible(found) == [[True, False, False], [False, True, False]]


def test_a_column_without_a_schema_is_written_as_the_one_it_is_compared_with(write_job: JobWriter) -> None:
    rules = rule('"r_load_least"', "at_most", '"r_load"')
    found = prepared(write_job, rules, [{"r_load": "2k"}], [{"r_load_least": "1k8"}, {"r_load_least": "2k2"}])
    assert eligible(found) == [[True, False]]
    assert found.warnings() == ()


def test_names_and_topologies_may_be_compared(write_job: JobWriter) -> None:
    rules = rule('"part"', "equals", '"only"') + rule('"serves"', "equals", '"topology"')
    found = prepared(write_job, rules, [{"only": "p001"}, {"only": ""}], [{"serves": "inverting"}] * 2)
    assert eligible(found) == [[False, True], [True, True]]


def test_the_first_rule_that_excludes_a_pair_counts_it(write_job: JobWriter) -> None:
    rules = rule('"x"', "at_least", '"x"', "first") + rule('"y"', "at_most", '"y"')
    cells = [{"x": x, "y": y} for x, y in (("1", "1"), ("2", "1"), ("2", "2"))]
    found = prepared(write_job, rules, cells, cells)
    assert eligible(found) == [[True, True, False], [False, True, False], [False, True, True]]
    assert found.not_eligible() == {"first": 2, "y at_most y": 2}
    assert found.pairs() == 5


@pytest.mark.parametrize(
    ("stage", "part", "table", "column", "value", "reason"),
    [
        ({"asks": "two"}, {}, "stages", "asks", "two", "is not a number; wanted is a plain number"),
        ({}, {"has": "1,5"}, "parts", "has", "1,5", "has a comma"),
        ({}, {"has": "inf"}, "parts", "has", "inf", "is not a number"),
        ({}, {"has": "1e400"}, "parts", "has", "1e400", "is infinite or too large"),
        ({"low": "3", "high": "2"}, {}, "stages", "low, high", "3, 2", "the low end of the range lies above its high"),
        ({}, {"from": "3", "to": "2"}, "parts", "from, to", "3, 2", "the low end of the range lies above its high"),
    ],
)
def test_a_bad_cell_is_rejected_and_the_good_rows_go_on(
    write_job: JobWriter, stage: Row, part: Row, table: str, column: str, value: str, reason: str
) -> None:
    rules = rule('"has"', "at_least", '"asks"') + rule('["from", "to"]', "covers", '["low", "high"]')
    good = {"asks": "1", "low": "1", "high": "2"}, {"has": "1", "from": "0", "to": "9"}
    found = prepared(write_job, rules, [{**good[0], **stage}, good[0]], [{**good[1], **part}, good[1]])
    (reject,) = (*found.stages.rejects, *found.parts.rejects)
    assert Path(reject.source).stem == table
    assert (reject.row, reject.column, reject.value) == (2, column, value)
    assert reject.reason.startswith(reason)
    assert all(all(row) for row in eligible(found))


def test_a_cell_that_two_readers_want_is_rejected_once(write_job: JobWriter) -> None:
    found = prepared(write_job, rule('"r_o_max"', "at_most", '"r_load"'), [{"r_load": "2k"}], [{}, {"r_o_max": "x"}])
    assert [reject.column for reject in found.parts.rejects] == ["r_o_max"]


def test_a_number_of_a_parquet_file_is_a_number(write_job: JobWriter) -> None:
    tables = '[stages]\nfrom = "stages.parquet"\n[parts]\nfrom = "parts.parquet"\n'
    job = write_job(rule('"x"', "at_least", '"x"') + rule('"y"', "equals", '"y"'), tables=tables)
    stages = {"stage": ["a", "b"], "topology": ["inverting"] * 2, "r1": [1e3] * 2, "r2": [1e4] * 2}
    asks = {"accuracy_pct": [1.0] * 2, "x": [2.5, None], "y": [1, 2]}
    parts = {"part": ["p", "q", "r"], "a_ol_min": [1e5] * 3, "x": [2.5, 2.0, None], "y": [1.0, 2.0, float("nan")]}
    pq.write_table(pa.table(stages | asks), job.parent / "stages.parquet")
    pq.write_table(pa.table(parts), job.parent / "parts.parquet")
    found = service.prepare(job)
    assert eligible(found) == [[True, False], [False, True]]
    assert [(r.row, r.column, r.value) for r in found.parts.rejects] == [(3, "y", "nan")]


@pytest.mark.parametrize(
    ("columns", "words"),
    [
        (('"channels"', '"chanels"'), r"stages.csv: the column 'chanels' is missing, .*; did you mean 'channels'\?"),
        (('"chanels"', '"channels"'), r"parts.csv: the column 'chanels' is missing, .*; did you mean 'channels'\?"),
        (
            ('"zzz"', '"channels"'),
            r"parts.csv: the column 'zzz' is missing, which a rule of \[\[eligible\]\] comp\w+$",
        ),
    ],
)
def test_a_column_that_is_not_there_ends_the_job(write_job: JobWriter, columns: tuple[str, str], words: str) -> None:
    with pytest.raises(InputError, match=words):
        prepared(write_job, rule(columns[0], "at_least", columns[1]), [{"channels": "1"}], [{"channels": "1"}])


@pytest.mark.parametrize(
    ("rules", "words"),
    [
        ('part = "a"\nat_leest = "b"', r"in \[eligible.0\]: unknown key 'at_leest'; did you mean 'at_least'\?"),
        ('part = "a"', "eligible.0 is .*; wanted is a rule: part, and exactly one of at_least,"),
        ('part = "a"\nat_least = "b"\nequals = "b"', "eligible.0 is .*; wanted is a rule: part, and exactly one of"),
        ('at_least = "b"', r"in \[eligible.0\]: the key 'part' is missing: a column of the part table;"),
        ('part = "a"\ncovers = "b"', "eligible.0.part is 'a'; wanted is a list of two columns"),
        ('part = ["a", "b"]\nequals = "b"', "eligible.0.part is .*; wanted is the name of one column; a list of two"),
        ('part = "a"\nwithin = "b"', "eligible.0.within is 'b'; wanted is a list of two columns"),
        ('part = ["a", "b"]\ncovers = ["b"]', "eligible.0.covers is .*; wanted is a column of the stage table, or"),
        ('part = "a"\nequals = ["b", "c"]', "eligible.0.equals is .*; wanted is the name of a column"),
        ('part = "a"\nequals = ""', "eligible.0.equals is ''; wanted is the name of a column"),
        (
            'part = "a"\nequals = "b"\n[[eligible]]\npart = "a"\nequals = "b"',
            r"two rules of \[\[eligible\]\] are called 'a equals b'; give one of them another name",
        ),
    ],
)
def test_a_rule_that_cannot_be_read(write_job: JobWriter, rules: str, words: str) -> None:
    with pytest.raises(InputError, match=words):
        jobs.read(write_job(f"[[eligible]]\n{rules}\n"))


def test_names_that_rules_get(write_job: JobWriter) -> None:
    rules = (
        rule('"a"', "at_least", '"b"')
        + rule('["a", "b"]', "covers", '["c", "d"]')
        + rule('"a"', "within", '["c", "d"]')
        + rule('"a"', "equals", '"b"', "grade")
    )
    names = [one.name for one in jobs.read(write_job(rules)).eligible]
    assert names == ["a at_least b", "a to b covers c to d", "a within c to d", "grade"]


RULES = (
    rule('"channels"', "at_least", '"channels"')
    + rule('["t_low", "t_high"]', "covers", '["t_from", "t_to"]', "temperature")
    + rule('"package"', "equals", '"package"')
    + rule('"supply_current"', "within", '["least", "most"]')
)

TOPOLOGIES = {"inverting": {}, "non_inverting": {}, "follower": {"r1": "", "r2": ""}}


def random_rows(seed: int) -> tuple[list[Row], list[Row]]:
    """Stages of several topologies and parts, with cells for the rules, some blank."""
    rng = random.Random(seed)

    def cell(*choices: str) -> str:
        return rng.choice(("", *choices))

    stages = [
        {
            **STAGE,
            "stage": f"s{n:02}",
            "topology": topology,
            "accuracy_pct": rng.choice(("1", "0.001")),
            "tol_pct": rng.choice(("", "0.1")),
            **cells,
            "channels": cell("1", "2"),
            "t_from": cell("-40", "0"),
            "t_to": cell("70", "85"),
            "package": cell("SO-8", "8", "DIP"),
            "least": cell("1"),
            "most": cell("3", "5"),
        }
        for n, (topology, cells) in enumerate(rng.choices(list(TOPOLOGIES.items()), k=40))
    ]
    parts: list[Row] = [
        {
            **PART,
            "part": f"p{n:02}",
            "a_ol_min": rng.choice(("1000", "100000", "")),
            "a_ol_typ": "200000",
            "channels": cell("1", "2", "4"),
            "t_low": cell("-55", "-40", "0"),
            "t_high": cell("70", "125"),
            "package": cell("SO-8", "8.0"),
            "supply_current": cell("1", "2", "4", "6"),
        }
        for n in range(30)
    ]
    # A stage that no part may serve, and a part that may serve no stage that asks for anything.
    return [*stages, {**stages[0], "stage": "alone", "channels": "8"}], parts


def excluding(stage: Row, part: Row) -> str | None:
    """The first rule that excludes a pair, each rule written out."""

    def fails(asked: str, offered: str, holds: Callable[[float, float], bool]) -> bool:
        return asked != "" and (offered == "" or not holds(float(offered), float(asked)))

    def at_least(asked: str, offered: str) -> bool:
        return fails(asked, offered, lambda a, b: a >= b)

    def at_most(asked: str, offered: str) -> bool:
        return fails(asked, offered, lambda a, b: a <= b)

    if at_least(stage["channels"], part["channels"]):
        return "channels at_least channels"
    if at_most(stage["t_from"], part["t_low"]) or at_least(stage["t_to"], part["t_high"]):
        return "temperature"
    if stage["package"] and stage["package"] != part["package"].replace("8.0", "8"):
        return "package equals package"
    current = part["supply_current"]
    return (
        "supply_current within least to most"
        if at_least(stage["least"], current) or at_most(stage["most"], current)
        else None
    )


def rows_of(run: Path) -> list[dict[str, Any]]:
    """All rows of the verdict tables of a run, in their order."""
    return [row for path in sorted(run.glob("verdicts/*.parquet")) for row in pq.read_table(path).to_pylist()]


@pytest.mark.parametrize(("seed", "pairs_per_chunk"), [(1, 1_000_000), (2, 1_000_000), (2, 70), (3, 29)])
def test_a_run_holds_the_rows_of_the_eligible_pairs_and_counts_the_others(
    write_job: JobWriter, monkeypatch: pytest.MonkeyPatch, seed: int, pairs_per_chunk: int
) -> None:
    monkeypatch.setattr(blocks, "PAIRS_PER_CHUNK", pairs_per_chunk)
    stages, parts = random_rows(seed)
    results = "[results]\nterms = true\n"
    everything = service.screen(service.prepare(write_job(results, stages=stages, parts=parts, folder="all")))
    done = service.screen(service.prepare(write_job(RULES + results, stages=stages, parts=parts)))

    why = {(s["stage"], p["part"]): excluding(s, p) for s in stages for p in parts}
    wanted = [row for row in rows_of(everything.folder) if why[row["stage"], row["part"]] is None]
    assert len(wanted) > 50
    assert rows_of(done.folder) == wanted

    reasons = Counter(reason for reason in why.values() if reason)
    assert done.manifest["not_eligible"] == dict(reasons)
    assert len(reasons) == 4
    assert done.manifest["pairs"] == sum(done.manifest["verdicts"].values()) == len(wanted)
    assert done.manifest["dominant_terms"] == Counter(row["dominant_term"] for row in wanted)
    for kind, partners in (("stage", len(parts)), ("part", len(stages))):
        table = pq.read_table(done.folder / f"{kind}s.parquet").to_pylist()
        alone = 0
        for summary in table:
            mine = [row for row in wanted if row[kind] == summary[kind]]
            assert summary["not_eligible"] == partners - len(mine)
            for verdict in ("pass", "fail", "unproven"):
                assert summary[verdict] == sum(row["verdict"] == verdict for row in mine)
            alone += not mine
            if kind == "stage":
                rank = {"pass": 0, "unproven": 1, "fail": 2}
                best = min(mine, key=lambda row: (rank[row["verdict"]], row["limit_used"]), default={"part": ""})
                assert (summary["best_part"], summary["best_limit_used"]) == (best["part"], best.get("limit_used"))
        assert done.manifest["never_eligible"][f"{kind}s"] == alone
    assert "alone" in done.hopeless


def test_a_stage_without_an_eligible_part_keeps_its_row(write_job: JobWriter) -> None:
    done = service.screen(prepared(write_job, rule('"x"', "at_least", '"x"'), [{"x": "1"}, {"x": "9"}], [{"x": "1"}]))
    table = pq.read_table(done.folder / "stages.parquet").to_pylist()
    counts = [[row[name] for name in ("pass", "fail", "unproven", "not_eligible", "best_part")] for row in table]
    assert counts == [[1, 0, 0, 0, "p000"], [0, 0, 0, 1, ""]]
    assert table[0]["gain_ideal"] == table[1]["gain_ideal"] == -10.0
    assert table[1]["best_limit_used"] is None
    assert done.hopeless == ("s001",)
    assert done.manifest["warnings"][-1].endswith("stages.csv: no part is eligible for s001")
    assert done.manifest["never_eligible"] == {"stages": 1, "parts": 0}


def test_a_run_without_an_eligible_pair_is_a_run(write_job: JobWriter) -> None:
    found = prepared(write_job, rule('"x"', "at_least", '"x"'), [{"x": "2"}] * 5, [{"x": "1"}])
    assert found.warnings()[-1].endswith("no part is eligible for s000, s001, s002 and 2 more")
    done = service.screen(found)
    assert (done.manifest["pairs"], rows_of(done.folder)) == (0, [])
    assert done.manifest["never_eligible"] == {"stages": 5, "parts": 1}


def test_a_rule_that_excludes_nothing_changes_no_byte(write_job: JobWriter) -> None:
    stages, parts = random_rows(3)
    stages = [{**row, "open": ""} for row in stages]
    usual = write_job("[results]\nterms = true\n", stages=stages, parts=parts, folder="usual")
    nothing = rule('"channels"', "at_least", '"open"')
    ruled = write_job(f"{nothing}[results]\nterms = true\n", stages=stages, parts=parts)
    runs = [service.screen(service.prepare(job)).folder for job in (usual, ruled)]
    first, second = ({p.relative_to(run): p.read_bytes() for p in run.rglob("*.parquet")} for run in runs)
    assert first == second


def test_stages_that_ask_for_the_same_share_a_pattern(write_job: JobWriter) -> None:
    asked = [{"x": str(n % 3)} for n in range(30)]
    found = prepared(write_job, rule('"x"', "at_least", '"x"'), asked, [{"x": "2"}, {"x": "0.5"}])
    assert len(found.eligibility[0].excluded_by) == 3
    pattern, parts = found.eligibility[0].patterns()
    assert parts.tolist() == [[True, True], [True, False]]
    assert pattern.tolist() == [int(n % 3 > 0) for n in range(30)]
    assert found.eligibility[0].excluded_by.dtype == np.int8


@pytest.mark.parametrize(
    ("part", "words"),
    [
        (
            {"t_low": "-40", "t_high": "85"},
            "part 'p000' may not serve stage 's000': the rule 'grade' excludes it: "
            "the part's t_high is '85'; wanted is at least the stage's t_to, '105'",
        ),
        (
            {"t_low": "0", "t_high": ""},
            "the rule 'grade' excludes it: the part's t_low is '0'; wanted is at most the stage's t_from, '-40', "
            "and the part's t_high is blank; wanted is at least the stage's t_to, '105'",
        ),
        (
            {"t_low": "-55", "t_high": "125", "package": "DIP"},
            "the rule 'package equals package' excludes it: "
            "the part's package is 'DIP'; wanted is the same as the stage's package, 'SO-8'",
        ),
    ],
)
def test_explain_says_which_rule_excludes_a_pair(
    here: CommandLineHere, write_job: JobWriter, part: Row, words: str
) -> None:
    rules = rule('["t_low", "t_high"]', "covers", '["t_from", "t_to"]', "grade") + rule(
        '"package"', "equals", '"package"'
    )
    stage = {"t_from": "-40", "t_to": "105", "package": "SO-8"}
    job = prepared(write_job, rules, [stage], [{"package": "SO-8", **part}]).job.path
    ended = here("explain", job, "s000", "p000", status=2)
    assert words in ended.err
    assert ended.out == ""


def test_explain_of_an_eligible_pair_beside_others(here: CommandLineHere, write_job: JobWriter) -> None:
    cells = [{"x": "1"}, {"x": "2"}]
    ruled = prepared(write_job, rule('"x"', "at_least", '"x"'), cells, cells).job.path
    explained = here("explain", ruled, "s001", "p001", "--json").out
    usual = prepared(write_job, "", cells, cells).job.path
    assert here("explain", usual, "s001", "p001", "--json").out == explained


def test_check_and_screen_say_how_many_pairs_are_eligible(here: CommandLineHere, write_job: JobWriter) -> None:
    rules = rule('"x"', "at_least", '"x"') + rule('"part"', "equals", '"only"', "by name")
    stages = [{"x": "1"}, {"x": "2", "only": "p002"}, {"x": "3"}]
    job = prepared(write_job, rules, stages, [{"x": "1"}, {"x": "2"}, {"x": "2"}]).job.path
    wanted = [
        "Pairs that are eligible: 4",
        "Pairs that are not, by the first rule that excludes them: 5",
        "  x at_least x  4",
        "  by name       1",
        "Stages without an eligible part: 1",
        "Parts without an eligible stage: 0",
    ]
    for command in ("check", "screen"):
        ended = here(command, job)
        assert "\n".join(wanted) in ended.out
        assert "no part is eligible for s002" in ended.err
        found = json.loads(here(command, job, "--json").out)
        assert found["pairs"] == 4
        assert found["not_eligible"] == {"x at_least x": 4, "by name": 1}
        assert found["never_eligible"] == {"stages": 1, "parts": 0}


def test_a_formula_is_shortened_for_the_eligible_pairs(here: CommandLineHere, write_job: JobWriter) -> None:
    rules = rule('"x"', "at_least", '"x"')
    parts = [{"x": "2", "r_o_max": "0.001"}, {"x": "1", "r_o_max": "1000"}, {"x": "3", "r_o_max": "0.001"}]
    job = prepared(write_job, rules, [{"x": "2"}], parts).job.path
    found = here("form", "inverting", "--for", job, "--json").out
    few = prepared(write_job, "", [{"x": "2"}], [parts[0], parts[2]]).job.path
    assert json.loads(found)["pairs"] == 2
    assert json.loads(found)["formula"] == json.loads(here("form", "inverting", "--for", few, "--json").out)["formula"]
    none = prepared(write_job, rules, [{"x": "9"}], parts).job.path
    assert "no part is eligible for a stage" in here("form", "inverting", "--for", none, status=2).err
