"""Checks that both tables share: names in their order, however they are put in order."""

from __future__ import annotations

import numpy as np
import pyarrow as pa
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from gainassay.contracts.quantities import Numbers
from gainassay.tables import order
from gainassay.tables.checks import Checking
from gainassay.tables.raw import RawTable


def checking_of(names: list[str]) -> Checking:
    """A table of names alone."""
    columns = {"part": pa.array(names, pa.string())}
    rows = np.arange(2, 2 + len(names))
    return Checking.of(
        RawTable("parts.csv", "part", ("part",), columns, rows, ("parts.csv",), (0,), (), "", {}, {}, ".")
    )


NAMES = st.lists(st.text("ab é\U0001f600\uffff-0", min_size=1, max_size=12).filter(lambda text: text == text.strip()))


@pytest.mark.parametrize("short", [0, 8, 1000])
@settings(deadline=None)
@given(names=NAMES)
def test_names_are_in_the_order_of_their_code_points(short: int, names: list[str]) -> None:
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(order, "SHORT_NAME", short)
        checking = checking_of(names)
        checking.names("part")
        places, ordered = checking.in_order()
    once = sorted(name for name in set(names) if names.count(name) == 1)
    assert ordered.tolist() == once
    assert [names[position] for position in places] == once


@pytest.mark.parametrize("short", [0, 1000])
def test_every_row_of_a_repeated_name_names_the_others(monkeypatch: pytest.MonkeyPatch, short: int) -> None:
    monkeypatch.setattr(order, "SHORT_NAME", short)
    checking = checking_of(["b", "a", "b", "c", "b", "b", "b", "a", "", ""])
    checking.names("part")
    assert {reject.row: reject.reason for reject in checking.found()} == {
        2: "stands more than once: also in row 4, 6, 7 and 1 more; which is meant?",
        3: "stands more than once: also in row 9; which is meant?",
        4: "stands more than once: also in row 2, 6, 7 and 1 more; which is meant?",
        6: "stands more than once: also in row 2, 4, 7 and 1 more; which is meant?",
        7: "stands more than once: also in row 2, 4, 6 and 1 more; which is meant?",
        8: "stands more than once: also in row 2, 4, 6 and 1 more; which is meant?",
        9: "stands more than once: also in row 3; which is meant?",
        10: "is blank; each row needs a name",
        11: "is blank; each row needs a name",
    }


@pytest.mark.parametrize(
    ("name", "reason"),
    [
        ("amp\u200b-1", "holds a character that is not seen: U+200B; remove it"),
        ("\ufeffamp-1", "holds a character that is not seen: U+FEFF; remove it"),
        ("amp-\u202e1", "holds a character that is not seen: U+202E; remove it"),
        ("amp\u2028-1", "holds a character that is not seen: U+2028; remove it"),
        ("amp\u00ad-1", "holds a character that is not seen: U+00AD; remove it"),
        ("amp\u3164", "holds a character that is not seen: U+3164; remove it"),
        ("amp\U000e0041", "holds a character that is not seen: U+E0041; remove it"),
        ("amp\t-1", "holds a control character; use printable text"),
        ("amp\u0085\u200b-1", "holds a control character; use printable text"),
    ],
)
def test_a_name_holds_no_character_that_is_not_seen(name: str, reason: str) -> None:
    checking = checking_of(["amp-1", name, "Pr\u00fcfling 7 \u7535", "amp 2"])
    checking.names("part")
    assert [(reject.row, reject.reason) for reject in checking.found()] == [(3, reason)]


def test_what_stands_in_blocks_is_gathered() -> None:
    blocks = [np.array([]), np.array([1.0, np.nan]), np.array([3.0])]
    assert order.gathered(blocks, np.array([2, 0])).tolist() == [3.0, 1.0]


def test_a_column_that_takes_no_room_takes_none_when_it_is_gathered() -> None:
    blocks = [Numbers.nothing(count).blank for count in (0, 2, 1)]
    found = order.gathered(blocks, np.array([2, 0]))
    assert found.tolist() == [True, True]
    assert found.strides == (0,)
