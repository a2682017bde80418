"""Codes of vehicles by first sight."""

import numpy as np
import pyarrow as pa
import pytest

from stream.pings import VehicleBook
from stream.pings.book import Encoder


def encode(encoder: Encoder, value_ix: list[int], values: pa.Array) -> list[int]:
    """Encode plain lists."""
    return encoder.encode(np.array(value_ix, np.int32), values).tolist()


def test_code_is_given_by_first_sight_and_kept() -> None:
    """Ids get 0, 1, ... as they come up, and the same again later."""
    book = VehicleBook()
    assert [book.code(name) for name in ("b", "a", "b", "c")] == [0, 1, 0, 2]
    assert book.names == ["b", "a", "c"]
    assert len(book) == 3


def test_book_starts_with_given_names() -> None:
    """A book can be opened with ids that are known."""
    book = VehicleBook(["x", "y"])
    assert book.code("y") == 1
    assert book.lookup(["x", "z"]).tolist() == [0, -1]
    assert book.names == ["x", "y"]


def test_encode_orders_by_rows_not_by_dictionary() -> None:
    """The order of a dictionary, and entries that no row uses, leave no trace."""
    book = VehicleBook()
    assert encode(Encoder(book), [2, 0, 2], pa.array(["a", "unused", "c"])) == [0, 1, 0]
    assert book.names == ["c", "a"]


@pytest.mark.parametrize("values", [["a", "b", "c"], ["c", "b", "a"]])
def test_encode_goes_on_from_one_dictionary_to_the_next(values: list[str]) -> None:
    """The same dictionary again, or another one, gives the same codes."""
    book = VehicleBook()
    encoder = Encoder(book)
    encode(encoder, [1, 0], pa.array(["a", "b", "c"]))
    got = encode(encoder, [0, 1, 2], pa.array(values))
    assert dict(zip(values, got, strict=True)) == {"b": 0, "a": 1, "c": 2}


def test_encode_sees_what_others_wrote_into_the_book() -> None:
    """A second encoder of the same book gives the codes of the first."""
    book = VehicleBook()
    encode(Encoder(book), [0, 1], pa.array(["a", "b"]))
    assert encode(Encoder(book), [0], pa.array(["b"])) == [1]


def test_encode_goes_on_after_others_wrote_into_the_book() -> None:
    """What was looked up before another encoder gave codes is looked up again."""
    book = VehicleBook()
    one, two = Encoder(book), Encoder(book)
    values = pa.array(["a", "b"])
    encode(one, [0], values)
    encode(two, [1], values)
    assert encode(one, [1, 0], values) == [1, 0]
    assert book.names == ["a", "b"]


def test_encode_takes_a_value_that_stands_twice_for_one() -> None:
    """A dictionary with a value in two places gives one code."""
    book = VehicleBook()
    assert encode(Encoder(book), [2, 1, 0, 2], pa.array(["a", "b", "a"])) == [0, 1, 0, 0]
    assert book.names == ["a", "b"]


def test_encode_writes_whole_numbers_as_text() -> None:
    """Number ids stand in the book as their digits."""
    book = VehicleBook()
    big = 2**64 - 1
    encode(Encoder(book), [0, 1], pa.array([-3, 5], pa.int64()))
    encode(Encoder(book), [0], pa.array([big], pa.uint64()))
    assert book.names == ["-3", "5", "18446744073709551615"]
