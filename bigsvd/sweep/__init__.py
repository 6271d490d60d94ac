"""The only loop that reads the matrix: panels, dask graphs, sums in a fixed order."""

from bigsvd.sweep.events import Control, Listener, OutOfTimeError, Progress, StoppedError
from bigsvd.sweep.folding import fold, mirror
from bigsvd.sweep.panels import Panel, PanelReader
from bigsvd.sweep.partial import Partial, worst
from bigsvd.sweep.scratch import Scratch
from bigsvd.sweep.task import SweepTask
from bigsvd.sweep.waves import Engine, WaveKeeper, one_blas_thread

__all__ = [
    "Control",
    "Engine",
    "Listener",
    "OutOfTimeError",
    "Panel",
    "PanelReader",
    "Partial",
    "Progress",
    "Scratch",
    "StoppedError",
    "SweepTask",
    "WaveKeeper",
    "fold",
    "mirror",
    "one_blas_thread",
    "worst",
]
