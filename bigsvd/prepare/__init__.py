"""What happens to a panel as it is read: conversion, centring, scaling."""

from bigsvd.prepare.implicit import (
    PIECE_NONZEROS,
    ImplicitBlock,
    absent_per_column,
    add_up,
    implicit_block,
    pieces,
    sparse_statistics,
)
from bigsvd.prepare.preparation import LineStatistics, Preparation, line_statistics, prepare_unit

__all__ = [
    "PIECE_NONZEROS",
    "ImplicitBlock",
    "LineStatistics",
    "Preparation",
    "absent_per_column",
    "add_up",
    "implicit_block",
    "line_statistics",
    "pieces",
    "prepare_unit",
    "sparse_statistics",
]
