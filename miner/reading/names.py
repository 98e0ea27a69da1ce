"""Names as they stand in a table, to integer codes that do not depend on the order of rows."""

from __future__ import annotations

import numpy as np
import pyarrow as pa

from .stamps import is_text


def is_name_type(kind: pa.DataType) -> bool:
    """Tell whether a column of this type can hold names: text or whole numbers."""
    if pa.types.is_dictionary(kind):
        kind = kind.value_type
    return bool(is_text(kind) or pa.types.is_integer(kind) or pa.types.is_null(kind))


def fault_of_name(name: str | None, may_be_empty: bool = False) -> str | None:
    """Return why a name cannot be used, or None. Only an empty field counts as missing."""
    if name is None or name == "":
        return None if may_be_empty else "is empty"
    if "\0" in name:
        return "holds a NUL character"
    return None if name.strip() else "is blank"


class NameCoder:
    """Codes the names of one column chunk by chunk.

    Codes count names in the order seen until `sorted_codes` renumbers them by sorted name.
    """

    def __init__(self, may_be_empty: bool = False) -> None:
        self._may_be_empty = may_be_empty
        self._code_of: dict[str, int] = {}

    def codes(self, column: pa.Array) -> np.ndarray:
        """Return int32 codes [n], -1 for a name that cannot be used.

        Raises `pyarrow.ArrowInvalid` for bytes that are no UTF-8 text.
        """
        if not pa.types.is_dictionary(column.type):
            column = column.cast(pa.string()).dictionary_encode()
        names = column.dictionary.cast(pa.string()).to_pylist()
        known = self._code_of.get
        codes = [known(name, -2) for name in names]
        table = np.array(
            [self._new_code(n) if c == -2 else c for n, c in zip(names, codes, strict=True)]
            + [self._new_code(None)],
            dtype=np.int32,
        )
        indices = column.indices
        if indices.null_count:
            indices = indices.cast(pa.int64()).fill_null(len(names))
        return np.take(table, np.asarray(indices))

    def _new_code(self, name: str | None) -> int:
        if fault_of_name(name, self._may_be_empty) is not None:
            return -1
        return self._code_of.setdefault(name or "", len(self._code_of))

    def sorted_codes(self, codes: np.ndarray) -> tuple[np.ndarray, tuple[str, ...]]:
        """Return the codes renumbered by sorted name, and the names in use, sorted."""
        is_used = np.bincount(codes, minlength=len(self._code_of)) > 0
        names = sorted(name for name, code in self._code_of.items() if is_used[code])
        new_code = np.full(len(self._code_of), -1, dtype=np.int32)
        new_code[[self._code_of[name] for name in names]] = np.arange(len(names), dtype=np.int32)
        return new_code[codes], tuple(names)
