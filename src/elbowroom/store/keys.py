"""Content keys: one SHA-256 for everything a result depends on.

The inputs are written as one unambiguous string of bytes, and the key is its SHA-256.  Every item begins
with a letter that says what it is, and everything of variable length states its length, so that two
different inputs never write the same bytes:

======================= ===============================================================================
item                    canonical bytes
======================= ===============================================================================
None, True, False       ``n``  ``t``  ``f``
text                    ``s<bytes>:<utf-8>``
whole number            ``i<hex>;``, sign first; also any float that is whole: 1, 1.0, 1+0j agree; -0.0 is 0
other real number       ``r<float.hex()>;``: every bit of the double counts
complex number          ``c`` and its two parts, where the imaginary part is not zero
list or tuple           ``l<length>:`` and the items: a list and a tuple of the same items agree
dict with text keys     ``d<length>:`` and key, value, ..., sorted by key: their order is irrelevant
dataclass instance      ``o``, its class name as text, and its fields as a dict
numpy array             ``a``, the type (kind and bytes per number, without byte order) as text, the shape as
                        a list, then ``<bytes>:<numbers>``, little-endian, last axis fastest, -0.0 as 0.0
numpy array of text     ``a``, the kind letter as text, the shape as a list, the items as a list
======================= ===============================================================================

numpy scalars count as the Python numbers they equal.  An array is never equal to a list, nor to an array of
another type: the type says how much precision its numbers carry.
"""

from __future__ import annotations

import hashlib
import math
from collections.abc import Callable
from dataclasses import fields, is_dataclass

import numpy as np

CANONICAL_FORM = b"elbowroom canonical form 1\n"
"""Hashed ahead of the inputs, so that a change of the table above changes every key."""

_DEEPEST = 100
"""Levels of nesting; more means a structure that contains itself."""


def content_key(inputs: object) -> str:
    """Return the key of everything a result depends on.

    Parameters
    ----------
    inputs : dict, list, tuple, str, bool, None, int, float, complex, numpy scalar or array, dataclass
    instance
        Any nesting of these; see the table at the head of this module.  Units are the caller's, always the
        same for the same entry.

    Returns
    -------
    str
        64 hexadecimal digits in lower case.

    Raises
    ------
    TypeError
        For a type that has no canonical form; the message names the place, such as
        ``inputs['mesh'].order[2]``.
    ValueError
        For a number that is not finite, or nesting deeper than 100 levels; the message names the place.

    Notes
    -----
    Python numbers that compare equal give equal keys, except that ``True`` is not 1 nor ``False`` 0.

    Examples
    --------
    >>> content_key({"order": 3, "radius_m": 0.004}) == content_key({"radius_m": 0.004, "order": 3.0})
    True
    >>> content_key({"radius_m": float("nan")})
    Traceback (most recent call last):
    ValueError: inputs['radius_m']: expected a finite number, got nan
    """
    digest = hashlib.sha256(CANONICAL_FORM)
    _feed(digest.update, inputs, "inputs", 0)
    return digest.hexdigest()


def _feed(write: Callable[[bytes], None], value: object, path: str, depth: int) -> None:
    """Write the canonical bytes of one item and of everything inside it."""
    if depth > _DEEPEST:
        msg = f"{path[:200]}...: nested deeper than {_DEEPEST} levels; does it contain itself?"
        raise ValueError(msg)
    if isinstance(value, np.generic) and not isinstance(value, (np.void, np.longdouble, np.clongdouble)):
        value = value.item()
    if value is None:
        write(b"n")
    elif isinstance(value, bool):
        write(b"t" if value else b"f")
    elif isinstance(value, str):
        _feed_text(write, value)
    elif isinstance(value, (int, float, complex)):
        _feed_number(write, value, path)
    elif isinstance(value, (list, tuple)):
        write(b"l%d:" % len(value))
        for index, item in enumerate(value):
            _feed(write, item, f"{path}[{index}]", depth + 1)
    elif isinstance(value, dict):
        for name in value:
            if not isinstance(name, str):
                msg = f"{path}: expected text as the keys of a dict, got {name!r} ({type(name).__name__})"
                raise TypeError(msg)
        write(b"d%d:" % len(value))
        for name in sorted(value):
            _feed_text(write, name)
            _feed(write, value[name], f"{path}[{name!r}]", depth + 1)
    elif isinstance(value, np.ndarray):
        _feed_array(write, value, path, depth)
    elif is_dataclass(value) and not isinstance(value, type):
        names = sorted(field.name for field in fields(value))
        write(b"o")
        _feed_text(write, type(value).__name__)
        write(b"d%d:" % len(names))
        for name in names:
            _feed_text(write, name)
            _feed(write, getattr(value, name), f"{path}.{name}", depth + 1)
    else:
        msg = (
            f"{path}: {type(value).__module__}.{type(value).__qualname__} has no canonical form; "
            "expected numbers, text, bool, None, lists, dicts, numpy arrays or dataclasses"
        )
        raise TypeError(msg)


def _feed_text(write: Callable[[bytes], None], text: str) -> None:
    encoded = text.encode("utf-8", "surrogatepass")
    write(b"s%d:" % len(encoded))
    write(encoded)


def _feed_number(write: Callable[[bytes], None], value: complex, path: str) -> None:
    if isinstance(value, complex):
        if value.imag != 0.0:  # true of nan too, which then meets the check below
            write(b"c")
            _feed_number(write, value.real, f"{path}.real")
            _feed_number(write, value.imag, f"{path}.imag")
            return
        value = value.real
    if isinstance(value, float) and not math.isfinite(value):
        msg = f"{path}: expected a finite number, got {value!r}"
        raise ValueError(msg)
    # int(-0.0) is 0, which is how the two zeros come to agree
    if isinstance(value, int) or value.is_integer():
        write(b"i%x;" % int(value))
    else:
        write(b"r" + value.hex().encode() + b";")


def _feed_array(write: Callable[[bytes], None], array: np.ndarray, path: str, depth: int) -> None:
    kind, size = array.dtype.kind, array.dtype.itemsize
    # a mask would go unseen; the bytes of an extended-precision number contain uninitialised padding
    too_wide = size > {"f": 8, "c": 16}.get(kind, size)
    if isinstance(array, np.ma.MaskedArray) or kind not in "biufcUS" or too_wide:
        masked = "masked " if isinstance(array, np.ma.MaskedArray) else ""
        msg = f"{path}: a {masked}numpy array of type {array.dtype} has no canonical form"
        raise TypeError(msg)
    write(b"a")
    if kind in "US":
        _feed_text(write, kind)
        _feed(write, list(array.shape), path, depth)
        items = array.ravel().tolist()
        _feed(
            write,
            [item.decode("latin-1") if isinstance(item, bytes) else item for item in items],
            path,
            depth,
        )
        return
    if kind in "fc":
        if not np.all(np.isfinite(array)):
            where = tuple(int(i) for i in np.argwhere(~np.isfinite(array))[0])
            msg = f"{path}{list(where) if where else ''}: expected a finite number, got {array[where]}"
            raise ValueError(msg)
        array = array + array.dtype.type(0)  # -0.0 + 0.0 is +0.0; every other number stays as it is
    _feed_text(write, f"{kind}{size}")
    _feed(write, list(array.shape), path, depth)
    content = np.ascontiguousarray(array, dtype=array.dtype.newbyteorder("<"))
    write(b"%d:" % content.nbytes)
    write(content.tobytes())
