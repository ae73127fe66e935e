"""The compiled passes: the loops over edges, candidates and posts, in C (`scoring/passes/`).

`build_passes.py` compiles them when the project is installed. They are called through ctypes, so one library serves
every version of Python. What they compute is defined by `scoring.reduce`, `scoring.crowd`, `scoring.noise` and
`scoring.topk`, which do the same in NumPy and which the tests hold them against.
"""

import ctypes
import sys
from array import array
from collections.abc import Sequence
from ctypes import POINTER, Structure, c_char, c_char_p, c_double, c_int, c_int32, c_int64, c_uint64, c_void_p
from pathlib import Path
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

LIBRARY: Final = Path(__file__).with_name("_passes.so")

_FINE, _UNKNOWN_CODE, _NO_MEMORY, _BROKEN_VALUE = 0, -1, -2, -3

_INT, _NUMBER, _ANY = c_int64, c_double, c_void_p


class UnknownCodeError(LookupError):
    """An edge has a kind code that the policy was not compiled for: the kinds have grown since."""


class BrokenValueError(ValueError):
    """A post's value in the store is shorter than it says."""


class Rule(Structure):
    """A compiled policy as the passes read it; see `passes.h`."""

    _fields_ = (
        ("power", c_int32),
        ("exact", c_int32),
        ("scale_ms", c_double),
        ("exponent", c_double),
        ("stranger", c_double),
        ("codes", c_int64),
        ("weights", c_char_p),
        ("terms", c_int64),
        ("half_lives_ms", c_char_p),
        ("coefficients", c_char_p),
    )


class Who(Structure):
    """A reader as the passes read it; see `passes.h`."""

    _fields_ = (
        ("reader", c_uint64),
        ("people", c_int64),
        ("person", c_char_p),
        ("relation", c_char_p),
        ("marks", c_int64),
        ("mark", c_char_p),
        ("forms_length", c_int64),
        ("forms", c_char_p),
        ("topics_length", c_int64),
        ("topics", c_char_p),
    )


_SIGNATURES: Final[dict[str, tuple[Any, tuple[Any, ...]]]] = {
    "gather_new": (c_void_p, (_INT,)),
    "gather_free": (None, (_ANY,)),
    "gather_reset": (None, (_ANY,)),
    "gather_add": (c_int, (_ANY, POINTER(Rule), _INT, _ANY, _ANY, _ANY, _ANY, _NUMBER)),
    "gather_insert": (c_int, (_ANY, _INT, _ANY)),
    "gather_turn": (c_int, (_ANY, _INT, _ANY)),
    "gather_counts": (None, (_ANY, _ANY)),
    "gather_candidates": (_INT, (_ANY, _ANY, _ANY, _ANY, _ANY)),
    "choose_bounds": (
        c_int,
        (_ANY, _NUMBER, _NUMBER, _INT, _ANY, _ANY, _INT, _ANY, _ANY, _NUMBER, c_uint64, _NUMBER),
    ),
    "choose_newest": (c_int, (_ANY,)),
    "choose_without": (None, (_ANY, _INT, _ANY)),
    "choose_only": (c_int, (_ANY, _INT, _ANY)),
    "choose_take": (_INT, (_ANY, _INT, _ANY)),
    "choose_unseen": (_NUMBER, (_ANY, _NUMBER, _NUMBER)),
    "choose_next_bound": (_NUMBER, (_ANY,)),
    "judge": (c_int, (_ANY, POINTER(Rule), POINTER(Who), _INT, _ANY, _ANY, _ANY, _NUMBER)),
    "judge_rank": (None, (_ANY, c_int)),
    "judge_certain": (_INT, (_ANY, _NUMBER)),
    "judge_count": (_INT, (_ANY,)),
    "judge_found": (_INT, (_ANY, _INT, _ANY, _ANY, _ANY)),
    "post_marks": (c_int, (_INT, _ANY, _ANY, _INT, _INT, _ANY, _ANY, _NUMBER, _ANY)),
    "decay": (_NUMBER, (_NUMBER,)),
    "tie_key": (_NUMBER, (_NUMBER,)),
    "crowd_freshness": (_NUMBER, (POINTER(Rule), _NUMBER)),
    "freshness": (_NUMBER, (POINTER(Rule), _NUMBER)),
}


def _load() -> ctypes.PyDLL:
    if sys.byteorder != "little":
        raise ImportError("the compiled passes need a machine with little-endian integers")
    if not LIBRARY.exists():
        raise ImportError(f"{LIBRARY.name} is missing: install the project, or run `python build_passes.py`")
    library = ctypes.PyDLL(str(LIBRARY))
    for name, (result, arguments) in _SIGNATURES.items():
        function = getattr(library, name)
        function.restype, function.argtypes = result, arguments
    return library


passes: Final[Any] = _load()
"""The library; arrays are handed to it as `bytes` or ctypes arrays."""


def built_from() -> str:
    """Tell the digest of the sources that the library was built from."""
    return (c_char * 17).in_dll(passes, "built_from").value.decode()


def lengths(values: Sequence[bytes]) -> bytes:
    """Pack the lengths of values, bytes."""
    return array("q", map(len, values)).tobytes()


def numbers(values: NDArray[np.float64]) -> bytes:
    """Pack float64 values."""
    return values.astype("<f8", copy=False).tobytes()


def hashes(values: NDArray[np.uint64]) -> bytes:
    """Pack hashes."""
    return values.astype("<u8", copy=False).tobytes()


def check(status: int) -> None:
    """Raise what a pass reported.

    Raises:
        UnknownCodeError: an edge has a kind that the policy was not compiled for.
        BrokenValueError: a post's value is shorter than it says.
        MemoryError: there is no memory left.

    """
    if status == _FINE:
        return
    if status == _UNKNOWN_CODE:
        raise UnknownCodeError
    if status == _BROKEN_VALUE:
        raise BrokenValueError
    assert status == _NO_MEMORY  # noqa: S101  there is no other
    raise MemoryError
