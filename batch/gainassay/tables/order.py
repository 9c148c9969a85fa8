"""The order of names, and columns that are brought into it."""

from __future__ import annotations

from collections.abc import Sequence
from itertools import takewhile
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray

SHORT_NAME = 32
"""Bytes of names that are ordered by their bytes as numbers."""


def by_name(names: pa.Array) -> NDArray[np.intp]:
    """Positions by name, in the order of code points; short names go by their bytes as numbers, which is faster."""
    longest = pc.max(pc.binary_length(names)).as_py() or 0
    if longest > SHORT_NAME:
        return np.asarray(pc.sort_indices(names)).astype(np.intp)
    ends = [(end or "").encode() for end in pc.min_max(names).as_py().values()]
    # What all start with orders nothing.
    start = len(list(takewhile(lambda pair: pair[0] == pair[1], zip(*ends, strict=False))))
    words = max(1, -(-(longest - start) // 8))
    own = np.ascontiguousarray(_padded(names, start + 8 * words)[:, start:])
    numbers = own.view(">u8").astype(np.uint64).T
    return np.argsort(numbers[0]) if words == 1 else np.lexsort(numbers[::-1])


def repeated(ordered: pa.Array, order: NDArray[np.intp]) -> list[list[int]]:
    """Positions of each name that stands more than once, blank ones apart; names in their order, and its positions."""
    same = np.asarray(pc.equal(ordered[1:], ordered[:-1])) & np.asarray(pc.not_equal(ordered[1:], ""))
    found: list[list[int]] = []
    for place in np.flatnonzero(same):
        starts = not place or not same[place - 1]
        if starts:
            found.append([int(order[place])])
        found[-1].append(int(order[place + 1]))
    return [sorted(positions) for positions in found]


def as_numpy(names: pa.Array) -> NDArray[np.str_]:
    """Names as an array; those of ASCII alone by their bytes, which is faster."""
    longest = pc.max(pc.binary_length(names)).as_py() or 0
    if 0 < longest <= SHORT_NAME and pc.all(pc.string_is_ascii(names)).as_py():
        return _padded(names, longest).astype(np.uint32).view(f"U{longest}")[:, 0]
    return np.asarray(names.to_numpy(zero_copy_only=False).astype(np.str_))


def gathered(blocks: Sequence[NDArray[Any]], order: NDArray[np.intp]) -> NDArray[Any]:
    """Rows at some places of blocks that stand one under the other; a column that takes no room takes none then."""
    if not any(block.strides[0] for block in blocks):
        # One value stands in all rows, as `Numbers.nothing` has it.
        return np.broadcast_to(next(block[0] for block in blocks if len(block)), order.shape)
    return np.concatenate(blocks).take(order)


def _padded(texts: pa.Array, width: int) -> NDArray[np.uint8]:
    """Bytes of texts, each followed by zeros as far as `width`; shape (texts, width)."""
    padded = pc.ascii_rpad(texts, width, padding="\0")
    return np.frombuffer(padded.buffers()[2], dtype=np.uint8, count=width * len(texts)).reshape(-1, width)
