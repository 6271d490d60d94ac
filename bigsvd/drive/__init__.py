"""Drives the engine: one decomposition to its certificate, its forecast, exact slices, record and second look."""

from bigsvd.drive.deadline import Deadline
from bigsvd.drive.file_order import order_bytes
from bigsvd.drive.keeping import KeptRun, keep_run
from bigsvd.drive.missing import settle_missing
from bigsvd.drive.outcome import Outcome
from bigsvd.drive.probe import Forecast, make_forecast
from bigsvd.drive.run import run
from bigsvd.drive.slices import check_slices
from bigsvd.drive.verify import Check, Verification, verify_factors
from bigsvd.drive.writing import write_result

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
    "order_bytes",
    "run",
    "settle_missing",
    "verify_factors",
    "write_result",
]
