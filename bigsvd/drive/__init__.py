"""Drives the engine: one decomposition to its certificate, its forecast, exact slices, record and second look."""

from bigsvd.drive.deadline import Deadline
from bigsvd.drive.keeping import KeptRun, keep_run
from bigsvd.drive.probe import Forecast, make_forecast
from bigsvd.drive.record import run_record, spectrum_record
from bigsvd.drive.run import Outcome, run
from bigsvd.drive.slices import check_slices
from bigsvd.drive.verify import Check, Verification, verify_factors

__all__ = [
    "Check",
    "Deadline",
    "Forecast",
    "KeptRun",
    "Outcome",
    "Verification",
    "check_slices",
    "keep_run",
    "make_forecast",
    "run",
    "run_record",
    "spectrum_record",
    "verify_factors",
]
