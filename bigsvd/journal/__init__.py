"""The journal beside a result that is being made: what every wave added up, so that a run that was cut goes on."""

from bigsvd.journal.identity import identity_of
from bigsvd.journal.journal import Journal
from bigsvd.journal.run_folder import RunFolder, Standing, discard_finished, read_standing

__all__ = ["Journal", "RunFolder", "Standing", "discard_finished", "identity_of", "read_standing"]
