"""Questions about an atlas's objects in, plain Python answers out.

DuckDB reads the Parquet file; every value is bound as a parameter and every column name comes from the atlas's own
description, so nothing that a visitor sends becomes part of a statement.
"""

from __future__ import annotations

import math
import threading
from pathlib import Path
from typing import Any

import duckdb

from tilemap.catalogue.ingest import quoted
from tilemap.errors import InputError

LIMIT, LIMIT_MOST = 500, 10_000  # objects in one answer
BINS, BINS_MOST = 48, 1_000
EXACT = 2**53  # integers beyond it lose digits in a browser's numbers, and go out as text
LOG_SPAN = 30.0  # a column whose values span more than this factor is counted in logarithmic bins
WINDOW = "tilemap_u BETWEEN ? AND ? AND tilemap_v BETWEEN ? AND ? AND tilemap_depth BETWEEN ? AND ?"


class Objects:
    """The objects of one epoch of an atlas; safe to ask from many threads at once.

    Parameters
    ----------
    path
        The Parquet file that :func:`tilemap.catalogue.ingest.ingest` wrote.
    entry
        The ``catalogue`` entry of atlas.json that belongs to it.
    """

    def __init__(self, path: Path, entry: dict[str, Any]) -> None:
        self.path = Path(path)
        self.entry = entry
        self._columns = {column["name"]: column for column in entry["columns"]}
        # DuckDB takes these for wildcards, and a folder may well be called so.
        self._file = "".join(f"[{letter}]" if letter in "*?[" else letter for letter in str(path))
        self._connection = duckdb.connect(
            config={"autoinstall_known_extensions": False, "autoload_known_extensions": False, "threads": 2}
        )
        self._whole: dict[tuple[str, int], dict[str, Any]] = {}
        self._lock = threading.Lock()

    def in_view(
        self,
        u: tuple[float, float],
        v: tuple[float, float],
        depth: tuple[float, float],
        limit: int = LIMIT,
        low: float | None = None,
        high: float | None = None,
    ) -> dict[str, Any]:
        """How many objects lie in a window, and the first of them.

        Parameters
        ----------
        u, v, depth
            Closed intervals in the view's unit.
        limit
            How many objects to name at most; those with the largest rank come first.
        low, high
            Closed interval on the rank column; None leaves that side open.

        Returns
        -------
        ``{"in_view": n, "objects": [{"row", "u", "v", "depth", "size", "rank", "id", "columns": {...}}, ...]}``: `n` counts
        all that match, named or not. Rows are counted from 1 as in the input table. Values that are missing or not finite
        are None, whole numbers beyond 2**53 are text, and `id` is always text.
        """
        rank, identity = self.entry["rank"], self.entry["id"]
        condition, values = WINDOW, [*u, *v, *depth]
        for bound, sign in ((low, ">="), (high, "<=")):
            if bound is not None:
                condition += f" AND {quoted(rank)} {sign} ?"
                values.append(bound)
        names = list(self._columns)
        chosen = ", ".join(quoted(name) for name in names)
        with self._connection.cursor() as cursor:
            counted = cursor.execute(
                f"SELECT count(*) FROM read_parquet(?) WHERE {condition}", [self._file, *values]
            ).fetchone()
            rows = cursor.execute(
                "SELECT tilemap_row, tilemap_u, tilemap_v, tilemap_depth, tilemap_size, "
                f"{chosen} FROM read_parquet(?) WHERE {condition} ORDER BY {quoted(rank)} DESC NULLS LAST, tilemap_row LIMIT ?",
                [self._file, *values, limit],
            ).fetchall()
        objects = []
        for row in rows:
            columns = dict(zip(names, map(_sendable, row[5:]), strict=True))
            place = dict(zip(("row", "u", "v", "depth", "size"), map(_sendable, row[:5]), strict=True))
            known = columns[identity] if identity else None
            objects.append(
                {
                    **place,
                    "rank": columns[rank],
                    "id": None if known is None else str(known),
                    "columns": columns,
                }
            )
        return {"in_view": counted[0] if counted else 0, "objects": objects}

    def census(
        self,
        column: str,
        u: tuple[float, float],
        v: tuple[float, float],
        depth: tuple[float, float],
        bins: int = BINS,
    ) -> dict[str, Any]:
        """Counts of a numeric column in bins, in a window and in the whole view.

        Bins are logarithmic where no value is negative and the positive ones span more than a factor of 30.

        Returns
        -------
        ``{"column", "unit", "log", "edges": [bins + 1], "in_view": [bins], "whole": [bins],
        "left_out": {"in_view": n, "whole": n}}``; left out are values that are missing, not finite, or zero in logarithmic
        bins. A catalogue in which no value can be counted has no edges and no bins.

        Raises
        ------
        InputError
            If there is no such column or it holds text; the message names the columns that can be counted.
        """
        numeric = [name for name, known in self._columns.items() if known["type"] == "number"]
        if column not in numeric:
            raise InputError(f"no numeric column {column!r} to count; there are {', '.join(numeric) or 'none'}")
        with self._connection.cursor() as cursor:
            with self._lock:
                whole = self._whole.get((column, bins))
            if whole is None:
                whole = self._count_whole(cursor, column, bins)
                with self._lock:
                    if len(self._whole) > 256:  # any number of bins may be asked for
                        self._whole.clear()
                    self._whole[column, bins] = whole
            counts, left_out = self._count(cursor, column, whole, bins, f"WHERE {WINDOW}", [*u, *v, *depth])
        return {
            "column": column,
            "unit": self._columns[column]["unit"],
            "log": whole["log"],
            "edges": whole["edges"],
            "in_view": counts,
            "whole": whole["counts"],
            "left_out": {"in_view": left_out, "whole": whole["left_out"]},
        }

    def close(self) -> None:
        self._connection.close()

    def _count_whole(self, cursor: duckdb.DuckDBPyConnection, column: str, bins: int) -> dict[str, Any]:
        value = f"{quoted(column)}::DOUBLE"
        found = cursor.execute(
            f"SELECT min({value}), max({value}), min({value}) FILTER ({value} > 0) "
            f"FROM read_parquet(?) WHERE isfinite({value})",
            [self._file],
        ).fetchone()
        least, most, least_positive = found if found else (None, None, None)
        whole: dict[str, Any] = {"log": False, "edges": []}
        if least is not None:
            whole["log"] = least >= 0 and least_positive is not None and most / least_positive > LOG_SPAN
            whole["edges"] = _edges(least_positive if whole["log"] else least, most, bins, whole["log"])
        whole["counts"], whole["left_out"] = self._count(cursor, column, whole, bins, "", [])
        return whole

    def _count(
        self,
        cursor: duckdb.DuckDBPyConnection,
        column: str,
        whole: dict[str, Any],
        bins: int,
        where: str,
        values: list[float],
    ) -> tuple[list[int], int]:
        """Counts a bin, and the number of rows in none."""
        value = f"{quoted(column)}::DOUBLE"
        edges = whole["edges"]
        counts = [0] * (len(edges) - 1 if edges else 0)
        if edges:
            low, high = (math.log10(edges[0]), math.log10(edges[-1])) if whole["log"] else (edges[0], edges[-1])
            scaled = f"log10({value})" if whole["log"] else value
            countable = f"isfinite({value})" + (f" AND {value} > 0" if whole["log"] else "")
            # The last bin is closed; rounding at the ends stays inside. CASE keeps log10 away from zero.
            place = f"CASE WHEN {countable} THEN least(greatest(floor(({scaled} - ?) / ? * ?), 0), ? - 1)::INTEGER END"
            chosen = [low, high - low, bins, bins]
        else:
            place, chosen = "NULL", []
        rows = cursor.execute(
            f"SELECT {place} AS bin, count(*) FROM read_parquet(?) {where} GROUP BY bin", [*chosen, self._file, *values]
        ).fetchall()
        left_out = 0
        for bin_number, number in rows:
            if bin_number is None:
                left_out = number
            else:
                counts[bin_number] = number
        return counts, left_out


def _edges(low: float, high: float, bins: int, log: bool) -> list[float]:
    if log:
        first, last = math.log10(low), math.log10(high)
        inner = [10 ** (first + (last - first) * step / bins) for step in range(1, bins)]
        return [low, *inner, high]
    if low == high:  # one value only: a bin has to have a width
        spread = abs(low) * 0.5 or 0.5
        low, high = low - spread, high + spread
    return [low + (high - low) * step / bins for step in range(bins)] + [high]


def _sendable(value: Any) -> Any:
    """A value as JSON can carry it to a browser."""
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    if isinstance(value, int) and abs(value) > EXACT:
        return str(value)
    return value
