"""Numbers in cells: plain text, letter codes and the numbers of an Arrow column; what is no number is refused."""

from __future__ import annotations

import math
from decimal import Decimal

import pyarrow as pa
import pytest
from hypothesis import given
from hypothesis import strategies as st

from gainassay.contracts import tables
from gainassay.contracts.quantities import numbers
from gainassay.contracts.tables import Column

ANY = Column(
    name="any",
    unit="ohm",
    meaning="",
    required=False,
    lowest=None,
    highest=None,
    nonzero=False,
    letter_code="resistance",
    in_place_of="",
)
"""A column without bounds that understands letter codes."""


def one(text: str, column: Column = ANY) -> float:
    """The number in a cell that is not refused."""
    found = numbers(pa.array([text]), column)
    assert not found.refused
    return float(found.values[0])


def reason(text: str, column: Column = ANY) -> str:
    """Why a cell is refused; nothing if it is not."""
    found = numbers(pa.array([text]), column)
    assert math.isnan(found.values[0]) or not found.refused
    return found.refused.get(0, "")


@pytest.mark.source
@pytest.mark.parametrize(
    ("code", "value"),
    # IEC 60062, marking codes for resistors: the letter stands where the decimal point would.
    [
        ("R47", 0.47),
        ("4R7", 4.7),
        ("470R", 470.0),
        ("4K7", 4700.0),
        ("47K", 47_000.0),
        ("47K3", 47_300.0),
        ("470K", 470_000.0),
        ("4M7", 4_700_000.0),
    ],
)
def test_letter_codes_of_iec_60062(code: str, value: float) -> None:
    assert one(code) == value


@pytest.mark.parametrize(
    ("text", "value"),
    [
        ("4k7", 4700.0),
        ("10M", 1e7),
        ("2T2", 2.2e12),
        ("1G", 1e9),
        ("k5", 500.0),
        ("0R0", 0.0),
        ("+5", 5.0),
        ("-5", -5.0),
        ("5.", 5.0),
        (".5", 0.5),
        ("1e3", 1000.0),
        ("1E+05", 1e5),
        ("007", 7.0),
        ("  4k7 ", 4700.0),
        ("\t12\n", 12.0),
        ("1e-400", 0.0),
    ],
)
def test_what_is_a_number(text: str, value: float) -> None:
    assert one(text) == value


@pytest.mark.parametrize(
    "text",
    [
        *("nan", "inf", "-inf", "Infinity", "1_000", "１２", "٣", "−5", "0x10", "1,5", "1 000", "TRUE", "n/a", "1.5.2"),
        *("4k7k", "k", "R", "10m", "4k-7", "-4k7", "4k7e3", ".", "e5", "1e", "+", "--5", "=1+1", "5\x00", "1e99999"),
    ],
)
def test_what_is_no_number(text: str) -> None:
    assert reason(text).startswith("is not a number")


@pytest.mark.parametrize("text", ["1e400", "-1e400", "1" + "0" * 400, "1" + "0" * 400 + "k"])
def test_what_is_too_large(text: str) -> None:
    assert reason(text) == "is infinite or too large"


@pytest.mark.parametrize("text", ["", " ", "\t \n", None])
def test_white_space_alone_is_blank(text: str | None) -> None:
    found = numbers(pa.array([text], pa.string()), ANY)
    assert found.blank.tolist() == [True]
    assert math.isnan(found.values[0])
    assert not found.refused


def test_a_letter_code_is_read_only_where_the_schema_says_so() -> None:
    assert one("4k7", tables.column("parts", "r_id_min")) == 4700.0
    assert reason("4k7", tables.column("parts", "a_ol_min")).startswith("is not a number")


SIGNS = st.sampled_from(["", "+", "-"])
DIGITS = st.text("0123456789", min_size=1, max_size=25)
EXPONENTS = st.one_of(st.just(""), st.integers(-30, 30).map("e{:+d}".format))
LETTERS = st.sampled_from([("R", 0), ("k", 3), ("K", 3), ("M", 6), ("G", 9), ("T", 12)])


@given(SIGNS, DIGITS, DIGITS, EXPONENTS)
def test_plain_text_is_rounded_once(sign: str, whole: str, part: str, exponent: str) -> None:
    text = f"{sign}{whole}.{part}{exponent}"
    exact = float(Decimal(text))
    assert reason(text) if math.isinf(exact) else one(text) == exact


@given(DIGITS, LETTERS, st.one_of(st.just(""), DIGITS))
def test_a_letter_code_is_rounded_once(whole: str, letter: tuple[str, int], part: str) -> None:
    code, power = letter
    assert one(f"{whole}{code}{part}") == float(Decimal(f"{whole}.{part}e{power}"))


@pytest.mark.parametrize(
    ("table", "column", "text", "wanted"),
    [
        ("parts", "r_id_min", "0", "must be above 0 ohm"),
        ("parts", "r_id_min", "-1M", "is not a number; wanted is a plain number in ohm or a code such as 4k7 or 10M"),
        ("parts", "r_o_max", "-1", "must be at least 0 ohm"),
        ("parts", "a_ol_min", "-50000", "must be above 0 V/V"),
        ("parts", "a_ol_min", "high", "is not a number; wanted is a plain number in V/V"),
        ("parts", "a_ol_db_min", "401", "must be at most 400 dB"),
        ("parts", "a_ol_db_min", "0", "must be above 0 dB"),
        ("stages", "tol_pct", "100", "must be below 100 %"),
        ("stages", "tol_pct", "-0.1", "must be at least 0 %"),
        ("stages", "accuracy_ppm", "0", "must be above 0 ppm"),
        ("stages", "target_gain", "0", "must not be zero"),
    ],
)
def test_a_reason_states_the_bound_and_the_unit(table: str, column: str, text: str, wanted: str) -> None:
    assert reason(text, tables.column(table, column)) == wanted


@pytest.mark.parametrize(
    ("table", "column", "text"),
    [
        ("parts", "r_o_max", "0"),
        ("parts", "a_ol_db_min", "400"),
        ("stages", "tol_pct", "0"),
        ("stages", "tol_pct", "99"),
    ],
)
def test_an_inclusive_bound_is_allowed(table: str, column: str, text: str) -> None:
    assert one(text, tables.column(table, column)) == float(text)


def test_a_column_of_floats() -> None:
    found = numbers(pa.array([1.5, None, math.nan, math.inf, -math.inf]), ANY)
    assert found.values.tolist()[:1] == [1.5]
    assert found.blank.tolist() == [False, True, False, False, False]
    assert found.refused == {
        2: "is nan, which is no number; leave the cell empty where nothing is known",
        3: "is infinite or too large",
        4: "is infinite or too large",
    }


@pytest.mark.parametrize("kind", [pa.int8(), pa.uint8(), pa.int64(), pa.uint64(), pa.float16(), pa.float32()])
def test_a_column_of_any_kind_of_number(kind: pa.DataType) -> None:
    found = numbers(pa.array([100, None, 3], kind), ANY)
    assert found.values.tolist()[::2] == [100.0, 3.0]
    assert found.blank.tolist() == [False, True, False]


@pytest.mark.parametrize("value", [2**53 + 1, 2**63 - 1])
def test_an_integer_that_no_float_holds_is_rounded(value: int) -> None:
    assert numbers(pa.array([value]), ANY).values.tolist() == [float(value)]


@pytest.mark.parametrize("kind", [pa.string(), pa.float64(), pa.null()])
def test_an_empty_column(kind: pa.DataType) -> None:
    assert not numbers(pa.array([], kind), ANY).values.size
