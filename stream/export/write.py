"""Tables written to files, batch by batch, with a data dictionary beside each.

Guarantee: a file appears under its name only when it is whole; memory doesn't grow with its rows.
"""

import json
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import polars as pl

from stream.config import Settings
from stream.export.columns import column
from stream.export.dictionary import dictionary
from stream.export.tables import Table, Withheld, find_table, rows_of
from stream.store import Store
from stream.store.origin import ATTRIBUTION, Origin, origin_of
from stream.store.target import check_target, whole_file

if TYPE_CHECKING:
    import pyarrow as pa

ENDINGS = (".parquet", ".csv")


@dataclass(frozen=True)
class Written:
    """What an export wrote.

    Attributes
    ----------
    n_rows : rows in the file
    withheld : strata, and passages in them, that the disclosure limits held back
    dictionary : path of the data dictionary
    """

    n_rows: int
    withheld: Withheld
    dictionary: Path


def dictionary_path(to: Path) -> Path:
    """Name the data dictionary of a file: the whole name, then `.schema.json`."""
    return to.with_name(to.name + ".schema.json")


def write(store: Store, what: str, to: Path, settings: Settings) -> int:
    """Write a table of the store to a file and give the number of rows; see `export_table`."""
    return export_table(store, what, to, settings).n_rows


def export_table(store: Store, what: str, to: Path, settings: Settings) -> Written:
    """Write a table of the store to a file, and its data dictionary beside it.

    Parameters
    ----------
    store
        An open store.
    what
        passages, arms, links, junctions, movements or histogram.
    to
        `.parquet` or `.csv` by its ending; a file of that name is replaced.
    settings
        The disclosure limits under `privacy`: passages of movements and histograms of strata that hold
        fewer passages or vehicles are held back, figures of such movements are null. With
        `privacy.plain_ids` (own data, own risk) nothing is.

    Raises
    ------
    ConfigError
        An unknown table.
    InputError
        A file that can't be written.
    StoreError
        The store holds no network yet.
    """
    table = find_table(what)
    check_target(to, ENDINGS)
    batches, withheld = rows_of(store, table, settings)
    origin = origin_of(store)
    writer = _write_parquet if to.suffix.lower() == ".parquet" else _write_csv
    with whole_file(to) as part:
        n_rows, schema = writer(part, batches, table, origin)
    told = dictionary(schema, table, origin, n_rows, withheld)
    beside = dictionary_path(to)
    with whole_file(beside) as part:
        part.write_text(json.dumps(told, indent=2, ensure_ascii=False) + "\n", encoding="utf-8")
    return Written(n_rows, withheld, beside)


def _stated(schema: "pa.Schema", table: Table, origin: Origin) -> "pa.Schema":
    """Give the schema with UTC times, units and origin: what a Parquet file says of itself."""
    import pyarrow as pa

    fields = []
    for one in schema:
        known = column(one.name)
        kind = pa.timestamp("us", "UTC") if pa.types.is_timestamp(one.type) else one.type
        notes = {"description": known.about} | ({"unit": known.unit} if known.unit else {})
        fields.append(pa.field(one.name, kind, nullable=one.name not in table.key, metadata=notes))
    whole = {
        "turntally.table": table.name,
        "turntally.network_digest": origin.network_digest,
        "turntally.reference_ids": ",".join(map(str, origin.reference_ids)),
        "turntally.units": json.dumps({n: u for n in schema.names if (u := column(n).unit)}),
    }
    if origin.is_osm:
        whole["attribution"] = ATTRIBUTION
    return pa.schema(fields, metadata=whole)


def _write_parquet(
    part: Path, batches: Iterator["pa.RecordBatch"], table: Table, origin: Origin
) -> tuple[int, "pa.Schema"]:
    import pyarrow as pa
    import pyarrow.parquet as pq

    first = next(batches)
    schema = _stated(first.schema, table, origin)
    n_rows = 0
    with pq.ParquetWriter(part, schema, compression="zstd") as out:
        for batch in batches:
            n_rows += batch.num_rows
            out.write_table(pa.Table.from_batches([batch]).cast(schema))
    return n_rows, schema


def _write_csv(
    part: Path, batches: Iterator["pa.RecordBatch"], table: Table, origin: Origin
) -> tuple[int, "pa.Schema"]:
    import pyarrow as pa

    n_rows = 0
    schema: Any = None
    with part.open("wb") as out:
        for batch in batches:
            is_first = schema is None
            if is_first:
                schema = _stated(batch.schema, table, origin)
            frame = pl.from_arrow(pa.Table.from_batches([batch]))
            assert isinstance(frame, pl.DataFrame)
            frame.write_csv(out, include_header=is_first, datetime_format="%Y-%m-%dT%H:%M:%S%.6fZ")
            n_rows += batch.num_rows
    return n_rows, schema
