"""Numbers in cells: plain text, letter codes and the numbers of an Arrow column; what is no number is refused."""

from __future__ import annotations

import math
from dataclasses import replace
from decimal import Decimal

import numpy as np
import pyarrow as pa
import pytest
from hypothesis import given
from hypothesis import strategies as st

from gainassay.contracts import tables
from gainassay.contracts.quantities import Writing, numbers
from gainassay.contracts.tables import WRITTEN_BY_USERS, Column, columns
from gainassay.contracts.units import NOTATIONS

ANY = Column(
    name="any",
    is_number=True,
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
        *("4k7 ohm", "4 k7", "4.k7k", "1e3k5", "ohm", "k ohm", "1 k ohm", "10 mohm", "10 F", "1ohmohm", "1 ohm ohm"),
        *("10 V", "1e1e1", "1e2 e3", "0b1", "1l", "1O", "1.0.0k", "+k", "1..2", "1…2", "½", "2²", "1×10^6", "5%"),
    ],
)
def test_what_is_no_number(text: str) -> None:
    assert reason(text)
    assert math.isnan(numbers(pa.array([text]), ANY).values[0])


@pytest.mark.parametrize(
    ("text", "unit", "value"),
    [
        ("4.7 kohm", "ohm", 4700.0),
        ("1 MOhm", "ohm", 1e6),
        ("10Meg", "ohm", 1e7),
        ("2.2 Megohm", "ohm", 2.2e6),
        ("4.7k", "ohm", 4700.0),
        ("4.7 kΩ", "ohm", 4700.0),
        ("0.3 GOhm", "ohm", 3e8),
        ("1e3 kohm", "ohm", 1e6),
        ("1E-3 Mohm", "ohm", 1000.0),
        ("75 ohm", "ohm", 75.0),
        ("10 nF", "F", 1e-8),
        ("4.7uF", "F", 4.7e-6),
        ("4.7 µF", "F", 4.7e-6),
        ("100p", "F", 1e-10),
        ("10 mH", "H", 1e-2),
        ("1 MHz", "Hz", 1e6),
        ("10 kHz", "Hz", 1e4),
        ("1.5M", "Hz", 1.5e6),
        ("100 dB", "dB", 100.0),
        ("200 V/mV", "V/V", 2e5),
        ("1.2 V/uV", "V/V", 1.2e6),
        ("200k", "V/V", 2e5),
        ("0.1 %", "%", 0.1),
        ("250 ppm", "%", 0.025),
        ("0.1 %", "ppm", 1000.0),
        ("25 ppm/K", "ppm/K", 25.0),
        ("25 ppm/°C", "ppm/K", 25.0),
        ("-40 °C", "degree Celsius", -40.0),
        ("5 mV", "V", 5e-3),
    ],
)
def test_a_unit_is_read_with_its_prefix(text: str, unit: str, value: float) -> None:
    assert one(text, replace(ANY, unit=unit, letter_code="")) == value


@pytest.mark.parametrize(
    ("text", "unit", "words"),
    [
        ("10 mohm", "ohm", "milli or mega"),
        ("1 MF", "F", "mega or, in old lists, micro"),
        ("1 mHz", "Hz", "milli or mega"),
        ("100 dB", "V/V", "such figures belong into a column"),
        ("100 V/mV", "dB", "such figures belong into a column"),
        ("300 K", "degree Celsius", "degrees Celsius"),
        ("10 nF", "ohm", "does not take"),
        (">= 100", "ohm", "limit or typical"),
        ("≥100", "ohm", "limit or typical"),
        ("typ 100", "ohm", "limit or typical"),
        ("100 typ.", "ohm", "limit or typical"),
        ("100 (min)", "ohm", "limit or typical"),
        ("~100", "ohm", "limit or typical"),
        ("10 ... 20", "ohm", "two numbers"),
        ("10 to 20", "ohm", "two numbers"),
        ("10k - 20k", "ohm", "two numbers"),
        ("2031-02-03", "ohm", "is a date"),
        ("3-Feb", "ohm", "is a date"),
        ("Jan 47", "ohm", "is a date"),
        ("03.02.2031", "ohm", "is a date"),
        ("2031-02-03 00:00:00", "ohm", "is a date"),
        ("=1+1", "ohm", "is a formula"),
        ("#N/A", "ohm", "spreadsheet's error"),
        ("#DIV/0!", "ohm", "spreadsheet's error"),
        ("n/a", "ohm", "nothing known"),
        ("-", "ohm", "nothing known"),
        ("TBD", "ohm", "nothing known"),
        ("1,000", "ohm", 'say decimal = ","'),
        ("1,5 kohm", "ohm", 'say decimal = ","'),
        ("1 000", "ohm", "digits in groups"),
        ("1\u202f000", "ohm", "digits in groups"),
        ("1'000", "ohm", "digits in groups"),
        ("'100", "ohm", "apostrophe"),
        ("−5", "ohm", "minus sign"),
        ("±5", "ohm", "plus or minus"),
        ("1.5×10^6", "ohm", "not plain"),
    ],
)
def test_what_stands_in_place_of_a_number_is_named(text: str, unit: str, words: str) -> None:
    assert words in reason(text, replace(ANY, unit=unit))


@pytest.mark.source
@pytest.mark.parametrize(
    ("letter", "percent"),
    # IEC 60062, letters of symmetrical tolerances.
    [("B", 0.1), ("C", 0.25), ("D", 0.5), ("F", 1.0), ("G", 2.0), ("J", 5.0), ("K", 10.0), ("M", 20.0)],
)
def test_tolerance_letters_of_iec_60062(letter: str, percent: float) -> None:
    column = tables.column("stages", "tol_pct")
    assert one(letter, column) == percent
    assert one(f"±{percent} %", column) == one(f"+/- {percent}", column) == percent
    assert reason(letter, tables.column("stages", "accuracy_pct"))


def test_a_decimal_comma_is_read_where_the_source_has_it() -> None:
    text = ["1,5", "1.5", "1.234,5", "4,7 kohm", "4k7", "1,2,3", "1000", " ,5"]
    found = numbers(pa.array(text), ANY, Writing(decimal=","))
    assert found.values.tolist()[0::3] == [1.5, 4700.0, 1000.0]
    assert found.values.tolist()[4] == 4700.0
    assert found.values.tolist()[7] == 0.5
    assert found.refused.keys() == {1, 2, 5}
    assert 'say decimal = "." in the job' in found.refused[1]


@pytest.mark.parametrize(
    ("text", "value"), [("4.7", 4.7e6), ("4.7 kohm", 4700.0), ("1e-3", 1000.0), ("0", 0.0), ("1 ohm", 1.0)]
)
def test_a_number_without_a_unit_has_that_of_its_column_in_the_job(text: str, value: float) -> None:
    assert numbers(pa.array([text]), ANY, Writing("Mohm")).values.tolist() == [value]


@pytest.mark.parametrize("text", ["10M", "4k7", "4.7k", "1R5"])
def test_a_prefix_beside_the_unit_of_a_job_is_read_in_neither_way(text: str) -> None:
    assert "which counts?" in numbers(pa.array([text]), ANY, Writing("Mohm")).refused[0]


@given(st.floats(1e-9, 1e9))
def test_a_number_and_its_text_get_the_same_unit(value: float) -> None:
    typed, text = (numbers(pa.array([cell]), ANY, Writing("Mohm")).values[0] for cell in (value, repr(value)))
    assert typed == text == float(Decimal(repr(value)) * 10**6)


def test_a_cell_that_is_no_plain_number_changes_no_other() -> None:
    plain = [str(n / 7) for n in range(200_000)]
    found = numbers(pa.array(plain), ANY).values
    mixed = numbers(pa.array([*plain[:150_000], "4k7", None, "", "x", *plain[150_000:]]), ANY)
    assert mixed.values[150_000] == 4700.0
    assert mixed.refused == {150_003: "is not a number; wanted is a plain number in ohm or a code such as 4k7 or 10M"}
    assert np.flatnonzero(mixed.blank).tolist() == [150_001, 150_002]
    assert np.delete(mixed.values, range(150_000, 150_004)).tolist() == found.tolist()


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
    assert one("4.7k", tables.column("parts", "a_ol_min")) == 4700.0


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
        ("parts", "r_id_min", "-1M", "must be above 0 ohm"),
        ("parts", "r_id_min", "12k3k", "is not a number; wanted is a plain number in ohm or a code such as 4k7 or 10M"),
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


def test_every_unit_of_a_users_column_is_one_that_people_may_write() -> None:
    written = {column.unit for table in WRITTEN_BY_USERS for column in columns(table)} - {"", "1", "gain"}
    assert written <= set(NOTATIONS)
