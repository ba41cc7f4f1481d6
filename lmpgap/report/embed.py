"""Arrays and scripts inside the page: typed arrays as base64, scripts named by their own hash."""

from __future__ import annotations

import base64
import hashlib
from typing import Any

import numpy as np
from numpy.typing import NDArray

_KINDS = {"f4": "Float32Array", "i4": "Int32Array", "u4": "Uint32Array", "u2": "Uint16Array", "u1": "Uint8Array"}


class ArrayStore:
    """Collects the arrays that the page's script reads; each is embedded once, little-endian."""

    def __init__(self) -> None:
        self._blocks: list[tuple[str, str]] = []

    def add(self, values: NDArray[Any]) -> dict[str, str]:
        """Keep an array and return how the script finds it: element id and typed-array class."""
        kind = values.dtype.str[1:]
        identifier = f"array-{len(self._blocks)}"
        raw = np.ascontiguousarray(values).astype("<" + kind, copy=False).tobytes()
        self._blocks.append((identifier, base64.b64encode(raw).decode("ascii")))
        return {"id": identifier, "type": _KINDS[kind]}

    @property
    def blocks(self) -> tuple[tuple[str, str], ...]:
        """Element id and base64 text of every array kept so far."""
        return tuple(self._blocks)


def compact_matrix(values: NDArray[np.float32], store: ArrayStore) -> dict[str, Any]:
    """Keep a (n_bus, n_hour) matrix in the smallest form that loses nothing.

    A matrix without any value is ``missing``, one of zeros is ``zero``, one that is the same at every bus (the
    energy component of one island) is kept once per hour.
    """
    if values.size == 0 or np.isnan(values).all():
        return {"kind": "missing"}
    if not values.any():
        return {"kind": "zero"}
    if np.array_equal(values, np.broadcast_to(values[:1], values.shape), equal_nan=True):
        return {"kind": "hour", **store.add(values[0])}
    return {"kind": "full", **store.add(values)}


def packed_amounts(values: NDArray[np.float32], store: ArrayStore) -> dict[str, Any]:
    """Keep amounts in three bytes each: whole steps of 0.0001, or of more where the largest asks for it.

    Cents are what a reader sees; a 32-bit figure per driver would make the page a quarter larger.
    """
    largest = float(np.abs(values).max(initial=0.0))
    step = max(1e-4, largest / (2**23 - 1))
    whole = np.rint(values.astype(float) / step).astype("<i4")
    return {**store.add(np.ascontiguousarray(whole.view(np.uint8).reshape(-1, 4)[:, :3]).ravel()), "step": step}


def script_hash(script: str) -> str:
    """Return the content-security-policy source that admits exactly this script."""
    digest = hashlib.sha256(script.encode("utf-8")).digest()
    return f"'sha256-{base64.b64encode(digest).decode('ascii')}'"
