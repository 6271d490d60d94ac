"""Certified leading singular factors of HDF5 and Zarr matrices larger than memory.

>>> import bigsvd
>>> bigsvd.decompose, bigsvd.open_matrix, bigsvd.open_factors  # doctest: +ELLIPSIS
(<function decompose ...>, <function open_matrix ...>, <function open_factors ...>)
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from bigsvd.api import decompose, forecast, open_factors, open_matrix, verify

__all__ = ["decompose", "forecast", "open_factors", "open_matrix", "verify"]


def __getattr__(name: str) -> Any:
    """Import the working parts when they are first asked for, so that ``import bigsvd`` costs nothing."""
    if name in __all__:
        from bigsvd import api

        return getattr(api, name)
    raise AttributeError(f"module 'bigsvd' has no attribute {name!r}")
