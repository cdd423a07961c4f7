"""Checksums of FITS: the ones'-complement sum of 32-bit words (FITS Standard 4.0, appendix J)."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

_MASK = 0xFFFFFFFF
_PUNCTUATION = frozenset(b":;<=>?@[\\]^_`")


def sum_words(data: npt.NDArray[Any]) -> int:
    """Ones'-complement sum of the 32-bit words that `data` has in a FITS file.

    Parameters
    ----------
    data : ndarray, C-contiguous
        float32 or float64 in native byte order. A float's bits, read as an integer, are the big-endian
        word (or two words) that the file holds: nothing needs to be swapped.
    """
    if data.dtype.itemsize == 4:
        return fold(int(data.view(np.uint32).sum(dtype=np.uint64)))
    words = data.view(np.uint64)
    high = int((words >> np.uint64(32)).sum(dtype=np.uint64))
    return fold(high + int((words & np.uint64(_MASK)).sum(dtype=np.uint64)))


def sum_bytes(block: bytes) -> int:
    """Ones'-complement sum of the 32-bit words of `block`, whose length is a multiple of 4."""
    return fold(int(np.frombuffer(block, dtype=">u4").sum(dtype=np.uint64)))


def fold(total: int) -> int:
    """Add what overflows 32 bits back in at the low end."""
    while total >> 32:
        total = (total & _MASK) + (total >> 32)
    return total


def encode(total: int) -> str:
    """ASCII form, 16 characters, of the complement of `total`: the value of CHECKSUM."""
    columns = []
    for shift in (24, 16, 8, 0):
        quarter, rest = divmod(((_MASK - total) >> shift) & 0xFF, 4)
        letters = [ord("0") + quarter + rest, *[ord("0") + quarter] * 3]
        # Letters and digits only: one of a pair goes up, the other down, until neither is punctuation.
        while any(letter in _PUNCTUATION for letter in letters):
            for first in (0, 2):
                if letters[first] in _PUNCTUATION or letters[first + 1] in _PUNCTUATION:
                    letters[first] += 1
                    letters[first + 1] -= 1
        columns.append(letters)
    text = bytes(columns[byte][letter] for letter in range(4) for byte in range(4))
    # The value begins in the fourth byte of a word, one after the opening quote.
    return (text[-1:] + text[:-1]).decode()
