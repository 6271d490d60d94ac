"""Words that say which axis holds the samples."""

from __future__ import annotations

Hint = tuple[str | None, str]
_SAMPLES = {"time", "frame", "frames", "sample", "samples", "cell", "cells", "obs", "t"}
_FEATURES = {"gene", "genes", "feature", "features", "var", "vars", "pixel", "pixels"}


def word_of(name: str) -> str:
    """What an axis of this name holds: ``samples``, ``features``, or empty where the word does not say.

    >>> word_of("Time"), word_of("genes"), word_of("lat")
    ('samples', 'features', '')
    """
    word = name.strip().lower()
    return "samples" if word in _SAMPLES else "features" if word in _FEATURES else ""
