"""Pings written as files in every format, for tests of the reader; nothing here comes from `stream`."""

import datetime
import gzip
import json
from collections.abc import Callable, Sequence
from pathlib import Path

import pyarrow as pa
import pyarrow.parquet as pq
import zstandard

# vehicle, microseconds since 1970, longitude, latitude; None where the row has none
Row = tuple[str | None, int | None, float | None, float | None]
HEADS = ("vehicle_id", "ts", "lon", "lat")
EPOCH = datetime.datetime(1970, 1, 1, tzinfo=datetime.UTC)
T0_US = 1_767_225_600_000_000  # 2026-01-01T00:00:00Z, by `date -d @1767225600 -u`


def iso(t_us: int | None) -> str | None:
    """Write a time as ISO 8601 with all its digits."""
    return None if t_us is None else (EPOCH + datetime.timedelta(microseconds=t_us)).isoformat()


def csv_text(rows: Sequence[Row]) -> bytes:
    """Write rows as CSV; what is missing is empty."""
    lines = [",".join(HEADS)]
    for vehicle, t_us, lon, lat in rows:
        cells = (vehicle, iso(t_us), None if lon is None else repr(lon), None if lat is None else repr(lat))
        lines.append(",".join("" if cell is None else cell for cell in cells))
    return ("\n".join(lines) + "\n").encode()


def ndjson_text(rows: Sequence[Row]) -> bytes:
    """Write rows as one JSON object a line; what is missing is null."""
    objects = (dict(zip(HEADS, (v, iso(t), lon, lat), strict=True)) for v, t, lon, lat in rows)
    return "".join(json.dumps(one) + "\n" for one in objects).encode()


def gpx_text(rows: Sequence[Row]) -> bytes:
    """Write rows as the points of one track."""
    points = []
    for _, t_us, lon, lat in rows:
        place = "".join(f' {k}="{v!r}"' for k, v in (("lon", lon), ("lat", lat)) if v is not None)
        time = "" if t_us is None else f"<time>{iso(t_us)}</time>"
        points.append(f"<trkpt{place}><ele>1</ele>{time}</trkpt>")
    body = "<trk><trkseg>" + "\n".join(points) + "</trkseg></trk>"
    head = '<?xml version="1.0"?><gpx version="1.1" creator="t" xmlns="http://www.topografix.com/GPX/1/1">'
    return (head + body + "</gpx>").encode()


def write_parquet(path: Path, rows: Sequence[Row], group_rows: int = 1_000_000) -> None:
    """Write rows as Parquet with UTC timestamps in microseconds."""
    vehicle, t_us, lon, lat = (list(c) for c in zip(*rows, strict=True)) if rows else ([], [], [], [])
    table = pa.table(
        {
            "vehicle_id": pa.array(vehicle, pa.string()),
            "ts": pa.array(t_us, pa.timestamp("us", "UTC")),
            "lon": pa.array(lon, pa.float64()),
            "lat": pa.array(lat, pa.float64()),
        }
    )
    pq.write_table(table, path, row_group_size=group_rows)


_TEXTS: dict[str, Callable[[Sequence[Row]], bytes]] = {
    "csv": csv_text,
    "ndjson": ndjson_text,
    "gpx": gpx_text,
}
_PACK: dict[str, Callable[[bytes], bytes]] = {
    "gz": gzip.compress,
    "zst": lambda data: zstandard.ZstdCompressor().compress(data),
}
ENDINGS = ("parquet", "csv", "csv.gz", "csv.zst", "ndjson", "ndjson.gz", "ndjson.zst")


def write_pings(path: Path, rows: Sequence[Row]) -> Path:
    """Write rows in the format that the file's name asks for."""
    kind, _, packed = path.name.partition(".")[2].partition(".")
    if kind == "parquet":
        write_parquet(path, rows)
    else:
        data = _TEXTS[kind](rows)
        path.write_bytes(_PACK[packed](data) if packed else data)
    return path
