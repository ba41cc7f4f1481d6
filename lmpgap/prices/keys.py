"""Constraints under one key each: both ends of a branch are one constraint, and their shadow prices add up.

Without this, two formulations that report the two ends of a branch under their own rows would seem to be bound
by different constraints, and the comparison of shift factors would compare nothing.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from scipy import sparse

from lmpgap.dispatch.result import ConstraintRows, constraint_name
from lmpgap.errors import LmpgapError
from lmpgap.scenario.network import BoolArray, FloatArray, IntArray


class ConstraintKey(NamedTuple):
    """What makes two rows the same constraint; fields as in `lmpgap.dispatch.result.ConstraintRows`."""

    kind: str
    contingency: str
    monitored: str
    direction: str

    @property
    def name(self) -> str:
        """The constraint's name in every table and picture."""
        return constraint_name(self.kind, self.contingency, self.monitored, self.direction)


@dataclass(frozen=True, kw_only=True)
class KeyedConstraints:
    """One entry per key; the rows of a key are merged.

    Attributes
    ----------
    keys : (n_key,)
        In order of first appearance.
    row_key : (n_row,)
        Position of each row's key.
    unit : (n_key,)
        Unit of limit and value.
    limit, value : (n_key,)
        Of the row that binds hardest: the largest multiplier, and among equals the least slack [unit].
    shadow_price : (n_key,)
        Fall of cost per unit of relaxed limit, summed over the rows, never negative [$/h per unit].
    at_penalty : (n_key,)
        True where a row of the key gave way and its shadow price is the penalty.
    angle_gain : sparse (n_key, n_branch)
        Change of the constrained quantity with each branch angle, the rows of a key averaged by their
        multipliers, so that ``shadow_price`` times it is the sum over the rows [unit/rad].
    """

    keys: tuple[ConstraintKey, ...]
    row_key: IntArray
    unit: tuple[str, ...]
    limit: FloatArray
    value: FloatArray
    shadow_price: FloatArray
    at_penalty: BoolArray
    angle_gain: sparse.csr_array


def merge_by_key(rows: ConstraintRows) -> KeyedConstraints:
    """Return the constraints with the rows of one key merged.

    Parameters
    ----------
    rows
        Rows as the dispatch reports them, in internal units.

    Returns
    -------
    KeyedConstraints
        In the units of the constraint table: a MW limit has its shadow price in $/MWh.

    Raises
    ------
    LmpgapError
        When rows of one key are in different units, so that their shadow prices cannot be added.
    """
    row_keys = [
        ConstraintKey(*fields)
        for fields in zip(rows.kind, rows.contingency, rows.monitored, rows.direction, strict=True)
    ]
    position: dict[ConstraintKey, int] = {}
    row_key = np.array([position.setdefault(key, len(position)) for key in row_keys], dtype=np.int64)
    n_key = len(position)

    units: list[str] = [""] * n_key
    for row, key in enumerate(row_key):
        if units[key] not in ("", rows.unit[row]):
            raise LmpgapError(
                f"constraint {row_keys[row].name!r} is reported in {units[key]} and in {rows.unit[row]}: "
                "report both rows in one unit"
            )
        units[key] = rows.unit[row]

    # [$/h per internal unit] / [unit per internal unit]
    row_shadow_price = rows.multiplier / rows.to_unit
    shadow_price = np.asarray(np.bincount(row_key, weights=row_shadow_price, minlength=n_key), dtype=float)
    n_rows_of_key = np.bincount(row_key, minlength=n_key)
    binding = shadow_price[row_key] > 0.0
    share = np.where(
        binding,
        np.divide(row_shadow_price, shadow_price[row_key], out=np.zeros(rows.n_row), where=binding),
        1.0 / n_rows_of_key[row_key],
    )

    # The first row of each key in order of multiplier, then of slack, is the one whose limit is shown.
    order = np.lexsort((rows.limit - rows.value, -row_shadow_price, row_key))
    _, first = np.unique(row_key[order], return_index=True)
    shown = order[first]
    at_penalty = np.zeros(n_key, dtype=bool)
    np.logical_or.at(at_penalty, row_key, rows.at_penalty)
    return KeyedConstraints(
        keys=tuple(position),
        row_key=row_key,
        unit=tuple(units),
        limit=rows.limit[shown] * rows.to_unit[shown],
        value=rows.value[shown] * rows.to_unit[shown],
        shadow_price=shadow_price,
        at_penalty=at_penalty,
        angle_gain=_averaged(rows, row_key, n_key, share * rows.to_unit),
    )


def _averaged(rows: ConstraintRows, row_key: IntArray, n_key: int, weight: FloatArray) -> sparse.csr_array:
    """Return the weighted sum of the gains of each key's rows, sparse (n_key, n_branch)."""
    gain = rows.angle_gain
    if n_key == rows.n_row:
        # One row per key, as mostly: nothing to add up, and keys are in the order of the rows.
        data = gain.data * np.repeat(weight, np.diff(gain.indptr))
        return sparse.csr_array((data, gain.indices, gain.indptr), shape=gain.shape)
    gather = sparse.csr_array((weight, (row_key, np.arange(rows.n_row))), shape=(n_key, rows.n_row))
    return sparse.csr_array(gather @ gain)
