"""The journal beside a result that is being made: what every wave added up, so that a run that was cut goes on."""

from bigsvd.journal.cost import journal_bytes
from bigsvd.journal.identity import identity_of
from bigsvd.journal.journal import Journal, check_interval
from bigsvd.journal.run_folder import RunFolder, discard_finished
from bigsvd.journal.standing import Standing, is_run_folder, read_standing

__all__ = [
    "Journal",
    "RunFolder",
    "Standing",
    "check_interval",
    "discard_finished",
    "identity_of",
    "is_run_folder",
    "journal_bytes",
    "read_standing",
]
