"""``datapackage.json``: what the tables of a run are, in the open Data Package standard."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from acquire.tables import Column, Table


def descriptor(
    run_id: str, title: str, started_utc: str, tables: Sequence[Table]
) -> dict[str, Any]:
    """The Data Package of a run, ready for JSON. ``created`` is the run's start."""
    return {
        "name": run_id.lower(),
        "id": run_id,
        "title": title,
        "created": started_utc,
        "resources": [_resource(table, name) for table, name in zip(tables, _names(tables))],
    }


def _names(tables: Sequence[Table]) -> list[str]:
    """A name for each table: lower case as the standard wants it, all different."""
    names: list[str] = []
    for table in tables:
        name, count = table.stream.lower(), 1
        while name in names:
            count += 1
            name = f"{table.stream.lower()}-{count}"
        names.append(name)
    return names


def _resource(table: Table, name: str) -> dict[str, Any]:
    return {
        "name": name,
        "path": table.path,
        "description": table.description,
        "format": "csv",
        "mediatype": "text/csv",
        "encoding": "utf-8",
        "schema": {
            "fields": [_field(column) for column in table.columns],
            "missingValues": [""],
            "primaryKey": [table.columns[0].name],
        },
    }


def _field(column: Column) -> dict[str, Any]:
    field = {"name": column.name, "type": column.kind}
    if column.unit:
        field["unit"] = column.unit
    if column.description:
        field["description"] = column.description
    return field
