"""Where a matrix comes from: files and arrays behind one interface."""

from bigsvd.source.spec import MatrixSpec, Source

__all__ = ["MatrixSpec", "Source"]
