# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Records -> a table, Parquet or CSV: written beside and then put in its place, so that it is whole at any moment."""

from __future__ import annotations

import csv
import os
from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path
from typing import Any

from ...errors import SettingsError
from .point import Record

FORMATS = ("parquet", "csv")
Row = Mapping[str, Any]


def check_format(name: str) -> None:
    """SettingsError for an unknown format, or one whose library is not there."""
    if name not in FORMATS:
        raise SettingsError(f"{name!r} is not known", key="--results", allowed="one of " + ", ".join(FORMATS))
    if name == "parquet":
        try:
            import pyarrow.parquet  # noqa: F401
        except ImportError as error:
            raise SettingsError(f"Parquet needs pyarrow, which is not installed ({error})", key="--results",
                                allowed="--results csv, or `pip install 'coord_planner[parquet]'`") from None


def ordered(records: Iterable[Record]) -> list[Row]:
    """Rows in the order of the points, whatever the order in which they came."""
    return sorted((record.row for record in records), key=lambda row: int(row["point"]))


def write_table(rows: Sequence[Row], file: Path) -> None:
    """Write the rows; the kind of file follows from its name."""
    columns = list(dict.fromkeys(key for row in rows for key in row))
    # Rows without figures have fewer columns; times come last in any case.
    columns.sort(key=lambda key: key.startswith("time_"))
    beside = file.with_name(f".{file.name}.part")
    if file.suffix == ".csv":
        _write_csv(rows, columns, beside)
    else:
        _write_parquet(rows, columns, beside)
    os.replace(beside, file)


def _write_csv(rows: Sequence[Row], columns: Sequence[str], file: Path) -> None:
    with open(file, "w", newline="", encoding="utf-8") as stream:
        writer = csv.DictWriter(stream, columns, restval="")
        writer.writeheader()
        writer.writerows({key: "" if value is None else value for key, value in row.items()} for row in rows)


def _write_parquet(rows: Sequence[Row], columns: Sequence[str], file: Path) -> None:
    import pyarrow as pa
    import pyarrow.parquet as pq

    held = {column: [row.get(column) for row in rows] for column in columns}
    pq.write_table(pa.table({column: _column(values) for column, values in held.items()}), file)


def _column(values: Sequence[Any]) -> Any:
    """One kind of value a column: whole numbers among real ones become real, anything else mixed becomes text."""
    import pyarrow as pa

    kinds = {type(value) for value in values if value is not None}
    if kinds <= {int, float} and float in kinds:
        return pa.array([None if value is None else float(value) for value in values], pa.float64())
    if len(kinds) > 1:
        return pa.array([None if value is None else str(value) for value in values], pa.string())
    return pa.array(values, pa.float64() if not kinds else None)
