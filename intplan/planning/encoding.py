"""Values of a search as JSON and back, losing nothing and running nothing.

JSON has numbers, text, lists and objects with text keys; everything else is an object with one
tag, a key that starts with ``$``: rationals, tuples, arrays, doubles that are not finite, and
dictionaries with other keys.  Doubles are written by their shortest decimal, which reads back to
the same double.
"""

from __future__ import annotations

import math
from decimal import Decimal, InvalidOperation
from fractions import Fraction
from typing import Any

import numpy as np

from intplan.sheet.numbers import fraction_text

DTYPES = ("float64", "float32", "int64", "int32", "int16", "int8", "uint8", "bool")
NAMES = {np.dtype(name): name for name in DTYPES}  # faster than the name of a dtype
NOT_FINITE = {"inf": math.inf, "-inf": -math.inf, "nan": math.nan}
LARGEST_ARRAYS = 1 << 28  # entries of all arrays of one file together
PLAIN_DIGITS = 10**4000  # ints up to here are JSON numbers; `int` reads no more than 4300 digits


class EncodingError(ValueError):
    """Something in a file that no encoder of this module writes."""


def encode(value: Any) -> Any:
    """Return `value` as something that `json.dumps` writes without loss.

    Raises
    ------
    TypeError
        For a type that has no encoding.
    """
    if value is None or isinstance(value, bool | str):
        return value
    if isinstance(value, float):
        return float(value) if math.isfinite(value) else {"$float": repr(float(value))}
    if isinstance(value, int):
        return int(value) if abs(value) < PLAIN_DIGITS else {"$ratio": fraction_text(value)}
    if isinstance(value, Fraction):
        return {"$ratio": fraction_text(value)}
    if isinstance(value, list):
        return [encode(entry) for entry in value]
    if isinstance(value, tuple):
        return {"$tuple": [encode(entry) for entry in value]}
    if isinstance(value, dict):
        if all(isinstance(key, str) and not key.startswith("$") for key in value):
            return {key: encode(entry) for key, entry in value.items()}
        return {"$pairs": [[encode(key), encode(entry)] for key, entry in value.items()]}
    if isinstance(value, np.ndarray):
        return _encode_array(value)
    if isinstance(value, np.generic):
        return encode(value.item())
    raise TypeError(f"no encoding for {type(value).__name__}")


def decode_number(text: Any) -> int | Fraction:
    """Read what `fraction_text` wrote.

    Raises
    ------
    EncodingError
        If it is anything else.
    """
    if not isinstance(text, str):
        raise EncodingError("an exact number is not text")
    top, slash, bottom = text.partition("/")
    digits = bottom if slash else "1"
    if not (top.removeprefix("-").isascii() and top.removeprefix("-").isdigit()):
        raise EncodingError("an exact number is not written in digits")
    if not (digits.isascii() and digits.isdigit() and digits.strip("0")):
        raise EncodingError("an exact number has no whole denominator")
    try:
        number = Fraction(int(Decimal(top)), int(Decimal(digits)))
    except (InvalidOperation, OverflowError) as error:
        raise EncodingError("an exact number is out of range") from error
    return number.numerator if number.denominator == 1 else number


class Decoder:
    """Reads what `encode` wrote; one decoder a file, because the arrays of a file share a limit."""

    def __init__(self, largest_arrays: int = LARGEST_ARRAYS) -> None:
        self.room = largest_arrays

    def decode(self, value: Any) -> Any:
        """Return the value that was encoded.

        Raises
        ------
        EncodingError
            If the tags or their contents are not what `encode` writes.
        """
        if isinstance(value, list):
            return [self.decode(entry) for entry in value]
        if not isinstance(value, dict):
            return value
        tag = next((key for key in value if key.startswith("$")), None)
        if tag is None:
            return {key: self.decode(entry) for key, entry in value.items()}
        if tag == "$array":
            return self._decode_array(value)
        if len(value) > 1:
            raise EncodingError("a tagged value has more than its tag")
        return self._decode_tagged(tag, value[tag])

    def _decode_tagged(self, tag: str, content: Any) -> Any:
        if tag == "$ratio":
            return decode_number(content)
        if tag == "$float" and isinstance(content, str) and content in NOT_FINITE:
            return NOT_FINITE[content]
        if tag == "$tuple" and isinstance(content, list):
            return tuple(self.decode(entry) for entry in content)
        if tag == "$pairs" and isinstance(content, list):
            return self._decode_pairs(content)
        raise EncodingError("a tagged value is damaged")

    def _decode_pairs(self, content: list[Any]) -> dict[Any, Any]:
        if not all(isinstance(pair, list) and len(pair) == 2 for pair in content):
            raise EncodingError("a list of pairs is damaged")
        try:
            return {self.decode(key): self.decode(entry) for key, entry in content}
        except TypeError as error:
            raise EncodingError("a key is not a plain value") from error

    def _decode_array(self, value: dict[str, Any]) -> np.ndarray:
        dtype, shape, values = (value.get(key) for key in ("$array", "shape", "values"))
        if dtype not in DTYPES or not isinstance(values, list) or not _is_shape(shape):
            raise EncodingError("an array is damaged")
        size = math.prod(shape)
        self.room -= size
        if self.room < 0:
            raise EncodingError("its arrays are too large")
        entries = _read_entries(values, dtype)
        if "at" not in value:
            if len(entries) != size:
                raise EncodingError("an array does not fit its shape")
            return entries.reshape(shape)
        places = value["at"]
        if (
            not isinstance(places, list)
            or len(places) != len(entries)
            or not all(type(place) is int and 0 <= place < size for place in places)
        ):
            raise EncodingError("an array's places are damaged")
        flat = np.zeros(size, dtype)
        flat[places] = entries
        return flat.reshape(shape)


def _encode_array(array: np.ndarray) -> dict[str, Any]:
    """Write an array's entries, or only those that are not zero where these are few."""
    name = NAMES.get(array.dtype)
    if name is None:
        raise TypeError(f"no encoding for arrays of {array.dtype}")
    flat = array.ravel()
    encoded: dict[str, Any] = {"$array": name, "shape": list(array.shape)}
    kept = flat.nonzero()[0]
    # A negative zero is a zero with a sign: such arrays are written in full, to lose nothing.
    if 2 * len(kept) < len(flat) and not _has_negative_zero(flat):
        encoded["at"] = kept.tolist()
        flat = flat[kept]
    entries = flat.tolist()
    if flat.dtype.kind == "f" and not np.isfinite(flat).all():
        entries = [entry if math.isfinite(entry) else repr(entry) for entry in entries]
    encoded["values"] = entries
    return encoded


def _has_negative_zero(flat: np.ndarray) -> bool:
    return flat.dtype.kind == "f" and bool(np.signbit(flat[flat == 0]).any())


def _is_shape(shape: Any) -> bool:
    return (
        isinstance(shape, list)
        and len(shape) <= 4
        and all(type(side) is int and side >= 0 for side in shape)
    )


def _read_entries(values: list[Any], dtype: str) -> np.ndarray:
    """Return a list of plain numbers as an array, refusing other types and what would not fit."""
    kinds: tuple[type, ...] = (int,)
    if dtype == "bool":
        kinds = (bool,)
    elif dtype.startswith("float"):
        kinds = (float,)
        values = [NOT_FINITE.get(v, v) if isinstance(v, str) else v for v in values]
    if not all(type(entry) in kinds for entry in values):
        raise EncodingError("an array holds something else than its numbers")
    try:
        return np.array(values, dtype)
    except OverflowError as error:
        raise EncodingError("an array's number is out of range") from error
