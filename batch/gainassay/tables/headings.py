"""What a job says of the columns of a table: whose names they stand under, in which units, and what stands in."""

from __future__ import annotations

from collections.abc import Collection, Iterator, Mapping
from dataclasses import dataclass

import pyarrow as pa

from gainassay.contracts.documents import nearest
from gainassay.contracts.quantities import Writing, numbers
from gainassay.contracts.tables import Column
from gainassay.contracts.units import misread, power_of_ten
from gainassay.errors import InputError
from gainassay.job import Heading, Source


@dataclass(frozen=True)
class Headings:
    """The columns of a table as a job names them.

    Attributes
    ----------
    by_name : Mapping[str, Heading]
        By our name.
    names : Mapping[str, str]
        Our name for each of theirs that has another.
    constants : Mapping[str, str]
        Text that stands in every row, by our name.
    """

    by_name: Mapping[str, Heading]
    names: Mapping[str, str]
    constants: Mapping[str, str]


def headings(source: Source, called: str, header: Collection[str], known: Mapping[str, Column]) -> Headings:
    """What a job says of the columns of a table, checked against both.

    Parameters
    ----------
    called : str
        What messages call the table.
    header : Collection[str]
        The names of its columns.
    known : Mapping[str, Column]
        The columns that such a table may have, by name.

    Raises
    ------
    InputError
        If a column is not there or not known, is named twice, or cannot have the unit; every fault is listed.
    """
    faults = list(_faults(source, header, known))
    if faults:
        raise InputError("\n".join(f"{called}: in [{source.section}.columns]: {fault}" for fault in faults))
    by_name = {heading.ours: heading for heading in source.columns}
    return Headings(
        by_name=by_name,
        names={heading.theirs: ours for ours, heading in by_name.items() if heading.value is None},
        constants={ours: heading.value for ours, heading in by_name.items() if heading.value is not None},
    )


def _faults(source: Source, header: Collection[str], known: Mapping[str, Column]) -> Iterator[str]:
    taken = {heading.theirs for heading in source.columns if heading.value is None}
    ours: set[str] = set()
    for heading in source.columns:
        name = heading.ours
        if heading.value is None and heading.theirs not in header:
            yield f"the table has no column '{heading.theirs}'{nearest(heading.theirs, header)}"
        if name not in known:
            yield f"there is no column '{name}' to fill{nearest(name, known) or '; `gainassay columns` lists them'}"
        elif name in ours:
            yield f"two columns are to fill '{name}'; which is meant?"
        elif name in header and name not in taken:
            yield f"the table has a column '{name}' of its own; which is meant?"
        else:
            yield from _faults_of(heading, known[name], source.decimal)
        ours.add(name)


def _faults_of(heading: Heading, column: Column, decimal: str) -> Iterator[str]:
    if heading.unit and power_of_ten(heading.unit, column.unit) is None:
        doubt = misread(column.unit).get(heading.unit) or (
            f"it is in {column.unit}" if column.unit else "it has no unit"
        )
        yield f"'{heading.theirs}': '{column.name}' cannot be in '{heading.unit}'; {doubt}"
    elif heading.value is not None and column.is_number:
        found = numbers(pa.array([heading.value], pa.string()), column, Writing(decimal=decimal))
        for reason in found.refused.values():
            yield f"{column.name}: the value {heading.value!r} {reason}"
