"""What happens to a panel as it is read: conversion, centring, scaling."""

from bigsvd.prepare.preparation import LineStatistics, Preparation, line_statistics, prepare_unit

__all__ = ["LineStatistics", "Preparation", "line_statistics", "prepare_unit"]
