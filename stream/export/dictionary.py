"""The data dictionary beside an export: a Table Schema with units.

Source: Table Schema (Frictionless standard), METHODS.md section 13; `unit` is a property of our own.
"""

from typing import TYPE_CHECKING, Any

from stream.export.columns import column
from stream.export.tables import Table, Withheld
from stream.store.origin import ATTRIBUTION, LICENCE, Origin

if TYPE_CHECKING:
    import pyarrow as pa


def _type_of(kind: "pa.DataType") -> str:
    import pyarrow as pa

    checks = {
        "boolean": pa.types.is_boolean,
        "integer": pa.types.is_integer,
        "number": pa.types.is_floating,
        "string": lambda k: pa.types.is_string(k) or pa.types.is_large_string(k),
        "datetime": pa.types.is_timestamp,
    }
    return next(name for name, check in checks.items() if check(kind))


def _field(one: "pa.Field", table: Table) -> dict[str, Any]:
    known = column(one.name)
    out: dict[str, Any] = {"name": one.name, "type": _type_of(one.type), "description": known.about}
    if known.unit:
        out["unit"] = known.unit
    if one.name in table.key:
        out["constraints"] = {"required": True}
    return out


def dictionary(
    schema: "pa.Schema", table: Table, origin: Origin, n_rows: int, withheld: Withheld
) -> dict[str, Any]:
    """Describe an exported table.

    Returns
    -------
    dict
        `fields` (name, type, description, unit), `missingValues`, `primaryKey` as the standard has them;
        beside them `title`, `description`, `rows`, `withheld`, `network_digest`, `reference_ids`, and
        `attribution` with `licence` where the streets come from OpenStreetMap.
    """
    out: dict[str, Any] = {
        "title": table.title,
        "description": table.about,
        "fields": [_field(f, table) for f in schema],
        "missingValues": [""],
        "primaryKey": list(table.key),
        "rows": n_rows,
        "withheld": {"strata": withheld.n_strata, "passages": withheld.n_rows},
        "network_digest": origin.network_digest,
        "reference_ids": list(origin.reference_ids),
    }
    if origin.is_osm:
        out |= {"attribution": ATTRIBUTION, "licence": LICENCE}
    return out
