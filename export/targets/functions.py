"""The constants of a sealed model's logistic function, for an emitter that needs one of the two kinds."""

from __future__ import annotations

from runtime_min.model import Exponential, SealedModel, Table


def exponential_of(sealed: SealedModel) -> Exponential:
    """The exponential's constants. Raises ValueError where there are none: the arithmetic is of integers."""
    if sealed.exponential is None:
        raise ValueError(f"{sealed.name} has no exponential: its arithmetic is {sealed.arithmetic}")
    return sealed.exponential


def table_of(sealed: SealedModel) -> Table:
    """The logistic function's table. Raises ValueError where there is none: the arithmetic is of floating point."""
    if sealed.table is None:
        raise ValueError(f"{sealed.name} has no table: its arithmetic is {sealed.arithmetic}")
    return sealed.table
