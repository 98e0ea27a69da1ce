"""Numbers as they stand in a table, to float64.

Text is a plain decimal number, with an exponent if need be, and a point for the decimals. Columns
of any numeric type are taken as they are. An empty field is no number, and neither is "nan".
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc

from .stamps import is_text

_NUMBER = r"^-?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?$"


@dataclass(frozen=True)
class Numbers:
    """One column of numbers, every array [n].

    values: float64, NaN where not `is_ok`.
    is_ok: bool, the value is a finite number.
    is_given: bool, the field is neither null, nor empty text, nor the not-a-number of a float.
    """

    values: np.ndarray
    is_ok: np.ndarray
    is_given: np.ndarray


def is_number_type(kind: pa.DataType) -> bool:
    """Tell whether a column of this type can hold numbers: numeric, or text."""
    if pa.types.is_dictionary(kind):
        kind = kind.value_type
    is_numeric = pa.types.is_integer(kind) or pa.types.is_floating(kind)
    return bool(is_numeric or pa.types.is_decimal(kind) or pa.types.is_null(kind) or is_text(kind))


def read_numbers(column: pa.Array) -> Numbers:
    """Return a column of numbers, of a type `is_number_type` accepts, as float64."""
    if pa.types.is_dictionary(column.type):
        column = column.cast(column.type.value_type)
    is_given = np.asarray(column.is_valid())
    if is_text(column.type):
        text = column.cast(pa.string())
        is_given = is_given & _mask(pc.greater(pc.binary_length(text), 0))
        is_number = _mask(pc.match_substring_regex(text, _NUMBER))
        values = np.full(len(text), np.nan)
        values[is_number] = np.asarray(text.filter(pa.array(is_number)).cast(pa.float64()))
    elif pa.types.is_null(column.type):
        values = np.full(len(column), np.nan)
    else:
        # not a safe cast: a whole number beyond 2**53 loses digits no price has
        values = np.asarray(column.cast(pa.float64(), safe=False).fill_null(np.nan))
        is_given = is_given & ~np.isnan(values)
    is_ok = np.isfinite(values)
    return Numbers(np.where(is_ok, values, np.nan), is_ok, is_given)


def _mask(flags: pa.Array) -> np.ndarray:
    return np.asarray(flags.fill_null(False))
