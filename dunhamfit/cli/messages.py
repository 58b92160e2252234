"""Messages for the person at the terminal: harmless whatever text they quote, whatever the encoding."""

from __future__ import annotations

from typing import TextIO

from dunhamfit.show.escape import escape_controls

# The one character of our own tables that plain ASCII lacks.
_PLAIN = str.maketrans("─", "-")


def say(text: str, stream: TextIO) -> None:
    """Write a message of one or more lines, control characters shown as escapes."""
    write(escape_controls(text, keep_newlines=True) + "\n", stream)


def write(text: str, stream: TextIO) -> None:
    """Write `text`; what the encoding of `stream` lacks is written as a dash or an escape."""
    encoding = stream.encoding or "utf-8"
    try:
        text.encode(encoding)
    except UnicodeEncodeError:
        text = text.translate(_PLAIN).encode(encoding, "backslashreplace").decode(encoding)
    stream.write(text)
