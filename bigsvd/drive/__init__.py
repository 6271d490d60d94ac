"""Drives the engine: one decomposition to its certificate, its forecast, exact slices, record and second look."""

from bigsvd.drive.deadline import Deadline
from bigsvd.drive.probe import Forecast, make_forecast
from bigsvd.drive.record import run_record, spectrum_record
from bigsvd.drive.run import Outcome, run
from bigsvd.drive.slices import check_slice, draw_slices
from bigsvd.drive.verify import Check, Verification, verify_factors

__all__ = [
    "Check",
    "Deadline",
    "Forecast",
    "Outcome",
    "Verification",
    "check_slice",
    "draw_slices",
    "make_forecast",
    "run",
    "run_record",
    "spectrum_record",
    "verify_factors",
]
