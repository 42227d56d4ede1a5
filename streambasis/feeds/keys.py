"""The column that tells several feeds in one source apart."""

from __future__ import annotations

from typing import Any

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray


class Keys:
    """A column of keys, and a number for each key, in the order in which they appear.

    Readers give rows of numbers: with keys, the last number of a row is that of its key.

    Parameters
    ----------
    column : str
        Name of the column: text, or whole numbers, which are then taken as text as well.

    Attributes
    ----------
    names : list of str
        The keys so far.
    """

    __slots__ = ("_numbers", "column", "names")

    def __init__(self, column: str) -> None:
        self.column = column
        self.names: list[str] = []
        self._numbers: dict[str, int] = {}

    def number(self, key: Any) -> float:
        """Return the number of a key; NaN for none."""
        if key is None or isinstance(key, float | bool | list | dict) or key == "":
            return np.nan
        text = str(key)
        number = self._numbers.get(text)
        if number is None:
            number = self._numbers[text] = len(self.names)
            self.names.append(text)
        return number

    def numbers(self, column: pa.Array) -> NDArray[np.float64]:
        """Return the number of each key of an Arrow column."""
        found = column if pa.types.is_dictionary(column.type) else column.dictionary_encode()
        numbers = np.array([self.number(key) for key in found.dictionary.to_pylist()], np.float64)
        codes = found.indices.fill_null(-1).to_numpy(zero_copy_only=False)
        out: NDArray[np.float64] = np.append(numbers, np.nan)[codes]
        return out
