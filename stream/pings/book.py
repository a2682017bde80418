"""Vehicle ids and their dense codes, given by first sight.

Guarantee: an id keeps its code; codes run from 0 in the order in which ids first stand in the pings given,
whatever the format and the size of the chunks.
"""

from collections.abc import Iterable

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from stream.kernel import kernel

Codes = NDArray[np.int32]


@kernel
def recode_kernel(value_ix: Codes, next_code: int, lookup: Codes, code_out: Codes, first_out: Codes) -> int:
    """Turn positions in a list of values into codes, giving new codes by first sight.

    Parameters
    ----------
    value_ix : int32[n]      position in the list of values, within 0..k
    next_code : int64        the code that the first new value gets
    lookup : int32[k]        code of each value, -1 where it has none yet; filled in place
    code_out : int32[n]      written
    first_out : int32[k]     written: positions of the new values in order of first sight

    Returns
    -------
    n_new : int64            how many entries of first_out hold
    """
    n_new = 0
    for i in range(len(value_ix)):
        at = value_ix[i]
        code = lookup[at]
        if code < 0:
            code = next_code + n_new
            lookup[at] = code
            first_out[n_new] = at
            n_new += 1
        code_out[i] = code
    return n_new


class VehicleBook:
    """Vehicle ids as given, and their codes.

    Attributes
    ----------
    names : ids by code
    """

    def __init__(self, names: Iterable[str] = ()) -> None:
        self.names: list[str] = []
        self._code: dict[str, int] = {}
        for name in names:
            self.code(name)

    def __len__(self) -> int:
        """Count the vehicles."""
        return len(self.names)

    def code(self, name: str) -> int:
        """Look up the code of an id; a new id gets the next one."""
        found = self._code.get(name)
        if found is None:
            found = len(self.names)
            self._code[name] = found
            self.names.append(name)
        return found

    def lookup(self, names: list[str]) -> Codes:
        """Give the code of each id, -1 for those not in yet."""
        get = self._code.get
        return np.array([get(name, -1) for name in names], dtype=np.int32)


class Encoder:
    """Turns positions in lists of values into codes of a book; remembers the last list.

    Row groups of an archive repeat their dictionary batch after batch, so the list is looked up once.
    """

    def __init__(self, book: VehicleBook) -> None:
        self._book = book
        self._values: pa.Array | None = None
        self._names: list[str] = []
        self._lookup: Codes = np.zeros(0, dtype=np.int32)
        self._same: Codes | None = None
        self._n_known = 0

    def encode(self, value_ix: Codes, values: pa.Array) -> Codes:
        """Encode rows.

        Parameters
        ----------
        value_ix
            int32[n], position of each row's id in `values`.
        values
            The ids, texts or integers; may hold some that no row uses.

        Returns
        -------
        int32[n], codes of the book.
        """
        if self._values is None or not values.equals(self._values):
            self._take(values)
        elif len(self._book) != self._n_known:
            self._lookup = self._book.lookup(self._names)
        if self._same is not None:
            value_ix = self._same[value_ix]
        codes = np.empty(len(value_ix), dtype=np.int32)
        first = np.empty(len(self._names), dtype=np.int32)
        n_new = recode_kernel(value_ix, len(self._book), self._lookup, codes, first)
        for at in first[:n_new].tolist():
            self._book.code(self._names[at])
        self._n_known = len(self._book)
        return codes

    def _take(self, values: pa.Array) -> None:
        """Look up a new list; where it holds a value twice, both stand for the first."""
        self._values = values
        self._names = [v if isinstance(v, str) else str(v) for v in values.to_pylist()]
        self._lookup = self._book.lookup(self._names)
        self._same = None
        if len(set(self._names)) < len(self._names):
            first: dict[str, int] = {}
            same = [first.setdefault(name, i) for i, name in enumerate(self._names)]
            self._same = np.array(same, dtype=np.int32)
