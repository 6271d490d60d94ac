"""Bytes, seconds and counts as people write them: parsed and printed at the doors, plain numbers inside."""

from __future__ import annotations

import re
import shlex
from contextlib import suppress
from datetime import datetime, timedelta

from bigsvd.errors import OptionError, printable

_BYTE_UNITS = {
    "": 1,
    "b": 1,
    "kb": 10**3,
    "mb": 10**6,
    "gb": 10**9,
    "tb": 10**12,
    "kib": 2**10,
    "mib": 2**20,
    "gib": 2**30,
    "tib": 2**40,
    "k": 2**10,
    "m": 2**20,
    "g": 2**30,
    "t": 2**40,
}
_DURATION = re.compile(r"(?=.)(?:([0-9]+(?:[.][0-9]+)?)h)?(?:([0-9]+(?:[.][0-9]+)?)min)?(?:([0-9]+(?:[.][0-9]+)?)s)?")
_BYTES = re.compile(r"\s*([0-9]+(?:\.[0-9]+)?)\s*([a-zA-Z]*)\s*")


def parse_bytes(text: str | int, option: str = "--memory") -> int:
    """Read a size such as ``2GiB``, ``512 MiB`` or ``800MB`` as a number of bytes.

    Parameters
    ----------
    text : str or int
        A size; a bare letter (``2G``) is binary, an ``int`` is returned as it is.
    option : str
        Name of the option, for the message.

    Returns
    -------
    int
        Bytes.

    Raises
    ------
    OptionError
        If the text is not a size above zero.

    Examples
    --------
    >>> parse_bytes("512MiB")
    536870912
    >>> parse_bytes("1.5 GB")
    1500000000
    """
    match = _BYTES.fullmatch(str(text))
    factor = _BYTE_UNITS.get(match[2].lower()) if match else None
    size = int(float(match[1]) * factor) if match and factor else 0
    if size <= 0:
        raise OptionError(
            f"{option} needs a size such as 2GiB, not {str(text)!r}", remedy=f"Write {option} 2GiB or {option} 800MB."
        )
    return size


def show_bytes(size: float) -> str:
    """Print bytes in binary units with three figures.

    >>> show_bytes(536870912)
    '512 MiB'
    >>> show_bytes(1234)
    '1.21 KiB'
    """
    value, unit = float(size), "B"
    for larger in ("KiB", "MiB", "GiB", "TiB"):
        if abs(value) < 1024:
            break
        value, unit = value / 1024, larger
    if unit == "B":
        return f"{int(value)} B"
    text = f"{value:.0f}" if value >= 100 else f"{value:.1f}" if value >= 10 else f"{value:.2f}"
    return f"{text.rstrip('0').rstrip('.') if '.' in text else text} {unit}"


def parse_deadline(text: str | float, now: float) -> float:
    """Read a moment such as ``06:30`` or ``2026-12-02T06:30``, or a duration such as ``8h``, ``2h30min`` or ``90s``.

    Parameters
    ----------
    text : str or float
        A number is a duration in seconds.
    now : float
        Seconds since 1970.

    Returns
    -------
    float
        Seconds since 1970. A time of day is the next one, by the clock of this machine.

    Raises
    ------
    OptionError
        If the text is neither, or the moment has passed.

    Examples
    --------
    >>> parse_deadline("1h30min", 1000.0)
    6400.0
    """
    moment: float | None = None
    words = str(text).strip()
    if isinstance(text, (int, float)):
        moment = now + text
    elif words and (match := _DURATION.fullmatch(words.replace(" ", ""))):
        hours, minutes, seconds = (float(part or 0) for part in match.groups())
        moment = now + 3600 * hours + 60 * minutes + seconds
    elif re.fullmatch(r"[0-9]{1,2}:[0-9]{2}", words):
        hour, minute = map(int, words.split(":"))
        if hour < 24 and minute < 60:
            today = datetime.fromtimestamp(now).replace(hour=hour, minute=minute, second=0, microsecond=0)
            moment = (today if today.timestamp() > now else today + timedelta(days=1)).timestamp()
    else:
        with suppress(ValueError):
            moment = datetime.fromisoformat(words).timestamp()
    if moment is None or not moment > now:
        raise OptionError(
            f"--finish-by needs a time to come or a duration, not {words!r}",
            remedy="Write --finish-by 06:30 or --finish-by 8h.",
        )
    return moment


def show_seconds(seconds: float) -> str:
    """Print a duration as people say it.

    >>> show_seconds(4.26), show_seconds(75), show_seconds(7260)
    ('4.3 s', '1 min 15 s', '2 h 1 min')
    """
    if seconds < 60:
        return f"{seconds:.1f} s" if seconds < 9.95 else f"{seconds:.0f} s"
    minutes, rest = divmod(round(seconds), 60)
    if minutes < 60:
        return f"{minutes} min {rest} s" if rest else f"{minutes} min"
    hours, minutes = divmod(minutes, 60)
    return f"{hours} h {minutes} min" if minutes else f"{hours} h"


def show_count(count: int) -> str:
    """Print a whole number with thousands separated.

    >>> show_count(100000)
    '100,000'
    """
    return f"{count:,}"


def show_shape(shape: tuple[int, ...]) -> str:
    """Print a shape.

    >>> show_shape((100000, 5000))
    '100,000 × 5,000'
    """
    return " × ".join(show_count(side) for side in shape)


def shell_word(text: str) -> str:
    r"""Quote a word for a shell, so that it can be typed whatever is in it.

    >>> shell_word("/night/frames"), shell_word("night watch"), shell_word("a\x1bb")
    ('/night/frames', "'night watch'", "$'a\\x1bb'")
    """
    if printable(text) == text:
        return shlex.quote(text)
    letters = [
        f"\\{letter}" if letter in "\\'" else letter if printable(letter) == letter else _bytes_of(letter)
        for letter in text
    ]
    return f"$'{''.join(letters)}'"


def _bytes_of(letter: str) -> str:
    """The bytes of a letter, as bash, ksh and zsh read them between $' and '."""
    return "".join(f"\\x{byte:02x}" for byte in letter.encode("utf-8", "surrogateescape"))
