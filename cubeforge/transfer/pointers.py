"""Reach a patch's numbers by their address, so that a kernel can walk through separately cached arrays."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt
from numba import types
from numba.extending import intrinsic


@intrinsic
def as_float32_pointer(typingctx: Any, address: Any) -> Any:
    """Reinterpret an integer address as a pointer to float32; ``numba.carray`` makes an array of it."""
    if not isinstance(address, types.Integer):
        return None
    signature = types.CPointer(types.float32)(address)

    def codegen(context: Any, builder: Any, sig: Any, args: Any) -> Any:
        return builder.inttoptr(args[0], context.get_value_type(sig.return_type))

    return signature, codegen


def addresses(arrays: list[npt.NDArray[np.float32]]) -> npt.NDArray[np.int64]:
    """Addresses of C-contiguous float32 arrays; the caller keeps the arrays alive while a kernel runs."""
    for array in arrays:
        if array.dtype != np.float32 or not array.flags.c_contiguous:
            raise ValueError("a kernel takes contiguous float32 arrays only")
    return np.array([array.ctypes.data for array in arrays], dtype=np.int64)
