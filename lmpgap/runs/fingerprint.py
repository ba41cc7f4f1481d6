"""Hashes of what a solve depends on, so that an unchanged interval is never solved twice."""

from __future__ import annotations

import hashlib
from dataclasses import fields, is_dataclass
from typing import Any

import numpy as np
from scipy import sparse


def fingerprint(*values: Any) -> str:
    """Return the SHA-256 of nested dataclasses, arrays, sparse matrices and plain values, as hexadecimal.

    Equal content gives an equal hash on every machine: arrays enter by type, shape and bytes, dataclasses by
    field name and value, floats by their shortest exact text.
    """
    digest = hashlib.sha256()
    for value in values:
        _update(digest, value)
    return digest.hexdigest()


def _update(digest: Any, value: Any) -> None:
    if isinstance(value, np.ndarray):
        digest.update(f"array {value.dtype.str} {value.shape} ".encode())
        digest.update(np.ascontiguousarray(value).tobytes())
    elif sparse.issparse(value):
        ordered = sparse.csr_array(value)
        ordered.sum_duplicates()
        for part in (ordered.indptr.astype(np.int64), ordered.indices.astype(np.int64), ordered.data):
            _update(digest, part)
        digest.update(f"sparse {ordered.shape} ".encode())
    elif is_dataclass(value) and not isinstance(value, type):
        digest.update(f"{type(value).__name__}(".encode())
        for field in fields(value):
            digest.update(f"{field.name}=".encode())
            _update(digest, getattr(value, field.name))
        digest.update(b")")
    elif isinstance(value, dict):
        digest.update(b"{")
        for key in sorted(value, key=str):
            digest.update(f"{key!r}:".encode())
            _update(digest, value[key])
        digest.update(b"}")
    elif isinstance(value, (tuple, list)):
        digest.update(f"[{len(value)} ".encode())
        for item in value:
            _update(digest, item)
        digest.update(b"]")
    elif value is None or isinstance(value, (str, bytes, bool, int, float)):
        digest.update(f"{type(value).__name__} {value!r};".encode())
    elif isinstance(value, np.generic):
        _update(digest, value.item())
    else:
        raise TypeError(f"no fingerprint for {type(value).__name__}")
