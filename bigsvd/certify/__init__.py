"""What a run proves: intervals, order, angles, the bound on what was missed, the verdict. Imports no solver."""

from bigsvd.certify.certificate import STATES, Certificate, SliceCheck

__all__ = ["STATES", "Certificate", "SliceCheck"]
