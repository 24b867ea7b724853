"""Parquet files, whose columns have names and types already."""

from __future__ import annotations

import io
import os
from collections.abc import Iterator
from contextlib import contextmanager

import numpy as np

from loopfit.core.errors import RecordError
from loopfit.record.table import Column, Table
from loopfit.record.units import split_unit

_MOST_BYTES = 1 << 30


def table_from_parquet(source: str, data: bytes) -> Table:
    """Return the columns of a Parquet file; times of the calendar become ISO stamps, nulls become NaN.

    Raises
    ------
    RecordError
        If the file is damaged, empty, or would fill the memory.
    """
    import polars as pl

    try:
        with _without_panic_messages():
            schema = pl.read_parquet_schema(io.BytesIO(data))
            height = pl.scan_parquet(io.BytesIO(data)).select(pl.len()).collect().item()
        if height * max(len(schema), 1) * 8 > _MOST_BYTES:
            raise RecordError(
                source, f"{height} rows of {len(schema)} columns are too many; keep only the part with the step test"
            )
        with _without_panic_messages():
            frame = pl.read_parquet(io.BytesIO(data))
    except RecordError:
        raise
    except (pl.exceptions.PolarsError, pl.exceptions.PanicException, OSError, ValueError) as problem:
        reason = " ".join(str(problem).split())[:80]
        raise RecordError(source, f"the Parquet file cannot be read ({reason})") from None
    columns = []
    for place, name in enumerate(frame.columns):
        series = frame[name]
        values = cells = None
        if series.dtype.is_numeric():
            values = series.cast(pl.Float64).to_numpy().astype(np.float64)
            if series.dtype.is_integer() and series.max() is not None and abs(int(str(series.max()))) > 2**53:
                cells = series.cast(pl.String).fill_null("").to_list()
        elif series.dtype == pl.Datetime or series.dtype == pl.Date:
            cells = series.cast(pl.Datetime("ns")).dt.to_string("%Y-%m-%d %H:%M:%S%.9f").fill_null("").to_list()
            cells = [cell.removesuffix("000") for cell in cells]
        elif series.dtype == pl.Duration:
            values = series.dt.total_nanoseconds().cast(pl.Float64).to_numpy() / 1e9
        else:
            cells = series.cast(pl.String, strict=False).fill_null("").to_list()
        columns.append(
            Column(
                number=place + 1,
                name=name or f"column {place + 1}",
                unit=split_unit(name)[1],
                values=values,
                cells=cells,
            )
        )
    if not columns or not frame.height:
        raise RecordError(source, "the Parquet file has no rows")
    return Table(
        source=source,
        lines=np.arange(1, frame.height + 1),
        columns=tuple(columns),
        named=True,
        preamble=(),
        restarts=(),
        set_aside=0,
        findings=(),
    )


@contextmanager
def _without_panic_messages() -> Iterator[None]:
    """Keep the reader's threads, which write of their panics past Python, off standard error."""
    try:
        kept, nowhere = os.dup(2), os.open(os.devnull, os.O_WRONLY)
    except OSError:  # there is no standard error
        yield
        return
    os.dup2(nowhere, 2)
    try:
        yield
    finally:
        os.dup2(kept, 2)
        os.close(kept)
        os.close(nowhere)
