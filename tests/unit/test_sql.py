"""Every SQL file keeps the house habits and fits the schema."""

import re
from collections.abc import Iterator
from pathlib import Path

import duckdb
import pytest

from stream.config import share_path
from stream.store import Store
from stream.store.files import Statement, creates_view, names_in, parse_statement, statement, views_in_order

FOLDERS = sorted(p.name for p in share_path("sql").iterdir() if p.is_dir())
NAMES = [name for folder in FOLDERS for name in names_in(folder)]
SCHEMA = names_in("schema")
KEPT_VIEWS = [s.name for s in views_in_order()]
OTHERS = [n for n in NAMES if n not in SCHEMA and n not in KEPT_VIEWS]
# Tables whose index would grow with the archive; audit/key_twice.sql holds their keys.
UNKEYED = {"passage", "section", "unfinished", "trip", "histogram", "moment", "carry", "span"}


@pytest.fixture(scope="module")
def schema(tmp_path_factory: pytest.TempPathFactory) -> Iterator[duckdb.DuckDBPyConnection]:
    """Give a connection to a store as it is when just made."""
    path = tmp_path_factory.mktemp("sql") / "fresh.duckdb"
    Store.open(path, create=True).close()
    with duckdb.connect(str(path)) as connection:
        # `retally` sets the passages aside under this name for as long as its transaction lasts.
        connection.execute("create table passage_before as select * from passage").fetchall()
        yield connection


def _code(one: Statement) -> str:
    """Strip comments and texts in quotes."""
    return re.sub(r"'[^']*'", "''", re.sub(r"--[^\n]*", "", one.text))


@pytest.mark.parametrize("name", NAMES)
def test_file_is_one_statement_with_the_stated_parameters(name: str) -> None:
    """A file holds one statement, and its parameters are those of its header."""
    one = statement(name)
    found = duckdb.extract_statements(one.text)
    assert len(found) == 1
    assert set(found[0].named_parameters) == set(one.params)
    assert len(set(one.params)) == len(one.params)


@pytest.mark.parametrize("name", NAMES)
def test_file_has_house_form(name: str) -> None:
    """Keywords are lower case, no tab, no star, lines within 120, and the header says what and how fine."""
    one = statement(name)
    code = _code(one)
    assert one.purpose
    assert one.grain
    assert code == code.lower()
    assert "\t" not in one.text
    assert not re.search(r"select\s+(distinct\s+)?\*", code)
    assert max(len(line) for line in one.text.splitlines()) <= 120
    assert one.text.endswith("\n")
    assert not one.text.rstrip().endswith(";")


@pytest.mark.parametrize("name", NAMES)
def test_file_changes_only_what_it_states(name: str) -> None:
    """The tables written are those of the header; a query writes nothing."""
    one = statement(name)
    code = _code(one)
    pattern = r"(?:insert into|delete from|update|create table|drop table|alter table)\s+(\w+)"
    written = {m for m in re.findall(pattern, code) if m != "set"}
    assert set(one.writes) == written


@pytest.mark.parametrize("name", NAMES)
def test_file_reads_what_it_states(name: str) -> None:
    """The header lists what stands after `from` and `join`, but for names made by the file itself."""
    one = statement(name)
    code = _code(one)
    made = set(re.findall(r"(?:with|,)\s+(?:recursive\s+)?(\w+)\s+as\s+(?:materialized\s+)?\(", code))
    read = set(re.findall(r"(?:\bfrom|\bjoin)\s+(\w+)", code.replace("distinct from", "")))
    read -= made | set(one.writes)
    stated = {r.removesuffix("()") for r in one.reads} - set(one.writes)
    assert stated == read


def _try_out(one: Statement, schema: duckdb.DuckDBPyConnection) -> None:
    """Run a statement that can't be prepared, and roll it back."""
    schema.begin()
    try:
        if "rename to passage_before" in one.text:
            schema.execute("drop table passage_before").fetchall()
        schema.execute(one.text).fetchall()
    finally:
        schema.rollback()


@pytest.mark.parametrize("name", OTHERS)
def test_statement_prepares_on_a_fresh_schema(name: str, schema: duckdb.DuckDBPyConnection) -> None:
    """The statement binds to the tables of a new store, with an empty `incoming` of the stated types."""
    one = statement(name)
    if one.incoming:
        columns = ", ".join(f"null::{kind} as {column}" for column, kind in one.incoming)
        schema.execute(f"create or replace temporary view incoming as select {columns} limit 0").fetchall()
    try:
        if re.search(r"^(drop|alter) ", one.text, re.MULTILINE):  # these can't be prepared
            _try_out(one, schema)
        else:
            schema.execute(f"prepare held as {one.text}").fetchall()
            schema.execute("deallocate held").fetchall()
    finally:
        schema.execute("drop view if exists incoming").fetchall()


@pytest.mark.parametrize("name", SCHEMA)
def test_schema_file_makes_the_table_of_its_name(name: str, schema: duckdb.DuckDBPyConnection) -> None:
    """One table per file, named like it; it has a key, or is one of those keyed by the audit."""
    table = Path(name).name.partition("_")[2]
    assert statement(name).writes == (table,)
    kinds = schema.execute(
        "select constraint_type from duckdb_constraints() where table_name = $t", {"t": table}
    ).fetchall()
    has_key = ("PRIMARY KEY",) in kinds
    assert has_key == (table not in UNKEYED)
    audited = set(statement("audit/key_twice").reads)
    assert table in audited or has_key


def test_kept_views_are_in_the_store(schema: duckdb.DuckDBPyConnection) -> None:
    """The views that DESIGN names stand in a new store."""
    found = {
        r[0] for r in schema.execute("select view_name from duckdb_views() where not internal").fetchall()
    }
    assert {n.partition("/")[2] for n in KEPT_VIEWS} == found
    wanted = {"histogram_total", "delay_by_maneuver", "costly_movements", "coverage", "trip_part"}
    assert wanted - found == set()


def test_audit_files_find_nothing_in_an_empty_store(schema: duckdb.DuckDBPyConnection) -> None:
    """An empty store is sound."""
    got = {name: schema.execute(statement(name).text).fetchall() for name in names_in("audit")}
    assert got == {name: [] for name in names_in("audit")}
    assert len(got) >= 5


def test_header_without_grain_is_refused() -> None:
    """A file whose header lacks a line is refused when it is loaded."""
    with pytest.raises(ValueError, match="header has"):
        parse_statement("x", "-- purpose: p\n-- params:  none\n-- reads:   a; writes: nothing\nselect 1")


def test_header_columns_are_read_over_several_lines() -> None:
    """Parameters, registered columns and written tables are taken from a header that runs on."""
    text = (
        "-- purpose: p\n-- grain:   g\n-- params:  $a,\n--          $b\n"
        "-- reads:   incoming (registered: x bigint,\n--          y varchar[]), t; writes: u\nselect 1\n"
    )
    one = parse_statement("x", text)
    assert one.params == ("a", "b")
    assert one.incoming == (("x", "bigint"), ("y", "varchar[]"))
    assert one.reads == ("incoming", "t")
    assert one.writes == ("u",)


def test_view_with_parameters_is_not_kept() -> None:
    """Only a file that creates a view is put into the store."""
    head = "-- purpose: p\n-- grain:   g\n-- params:  none\n-- reads:   a; writes: nothing\n"
    assert creates_view(parse_statement("view/x", head + "create view x as\nselect 1"))
    assert not creates_view(parse_statement("view/y", head + "select 1"))
