"""A formula shortened to what matters over the stages and parts at hand, with a verified deviation.

A piece is an addend of a sum, an impedance of a series connection or a branch of a parallel one. Pieces are
tried in the order of the deviation that dropping each of them alone causes, the smallest first; a piece stays
dropped if the whole formula, evaluated again over all pairs, stays within the given share of every stage's
required accuracy. What is claimed is the last such evaluation, never an estimate.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass

from gainassay.forms.expression import (
    Expression,
    Parallel,
    Product,
    Series,
    Sum,
    children,
    parallel,
    product,
    series,
    total,
)

Path = tuple[int, ...]
"""Place of a piece in a tree: which child at each step from the root."""


@dataclass(frozen=True)
class Deviation:
    """The largest deviation of a formula over all pairs, as a share of the required accuracy, and where.

    Attributes
    ----------
    share : float
        |gain/exact gain - 1| / required accuracy; nan if the formula has no value for some pair.
    stage, part : int
        The pair in which it occurs.
    """

    share: float
    stage: int
    part: int


@dataclass(frozen=True)
class Dropped:
    """A piece that was dropped.

    Attributes
    ----------
    piece, of : Expression
        The piece, and the sum or connection that it was dropped from.
    alone : Deviation
        What dropping it, and nothing else, does.
    together : Deviation
        What dropping it and all that was dropped before it does.
    """

    piece: Expression
    of: Expression
    alone: Deviation
    together: Deviation


@dataclass(frozen=True)
class Shortened:
    """A shortened formula.

    Attributes
    ----------
    formula : Expression
        The formula with all dropped pieces gone.
    dropped : tuple[Dropped, ...]
        In the order in which they went.
    deviation : Deviation
        The verified deviation of `formula`.
    """

    formula: Expression
    dropped: tuple[Dropped, ...]
    deviation: Deviation


def shorten(formula: Expression, within: float, measure: Callable[[Expression], Deviation]) -> Shortened:
    """Drop what does not matter.

    Parameters
    ----------
    within : float
        Share of the required accuracy that the shortened formula may deviate by.
    measure : callable
        The deviation of a formula over all pairs.
    """
    alone = {path: measure(without(formula, frozenset({path}))) for path in pieces(formula)}
    gone: frozenset[Path] = frozenset()
    kept = measure(formula)
    order: list[Path] = []
    for path in sorted((p for p in alone if alone[p].share <= within), key=lambda p: (alone[p].share, len(p), p)):
        if any(path[: len(other)] == other for other in gone) or _leaves_nothing(formula, gone, path):
            continue
        found = measure(without(formula, gone | {path}))
        if found.share <= within:
            # What lay inside a piece that goes now was dropped for nothing.
            order = [other for other in order if other[: len(path)] != path] + [path]
            gone, kept = frozenset(order), found
    dropped = tuple(
        Dropped(at(formula, p), at(formula, p[:-1]), alone[p], measure(without(formula, frozenset(order[: i + 1]))))
        for i, p in enumerate(order)
    )
    return Shortened(without(formula, gone), dropped, kept)


def pieces(expression: Expression) -> Iterator[Path]:
    """Places of all pieces that may be dropped."""
    for index, child in enumerate(children(expression)):
        if isinstance(expression, Sum | Series | Parallel):
            yield (index,)
        for path in pieces(child):
            yield (index, *path)


def at(expression: Expression, path: Path) -> Expression:
    """The expression at a place."""
    for index in path:
        expression = children(expression)[index]
    return expression


def without(expression: Expression, gone: frozenset[Path]) -> Expression:
    """The expression without the pieces at some places; of each sum or connection something is left."""
    inner: dict[int, set[Path]] = {}
    for path in gone:
        inner.setdefault(path[0], set()).add(path[1:])
    kept = [
        without(child, frozenset(inner.get(index, ())))
        for index, child in enumerate(children(expression))
        if () not in inner.get(index, ())
    ]
    match expression:
        case Series():
            return series(kept)
        case Parallel():
            return parallel(kept)
        case Sum():
            return total(kept)
        case Product(coefficient, over, _):
            return product(kept[: len(over)], kept[len(over) :], coefficient)
        case _:
            return expression


def _leaves_nothing(formula: Expression, gone: frozenset[Path], path: Path) -> bool:
    """Whether nothing would be left of the sum or connection that the piece at `path` belongs to."""
    siblings = len(children(at(formula, path[:-1])))
    return sum(len(other) == len(path) and other[:-1] == path[:-1] for other in gone) + 1 >= siblings
