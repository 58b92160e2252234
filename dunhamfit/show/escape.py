"""Text from outside made harmless for a terminal: what does not print is shown as an escape."""

from __future__ import annotations


def escape_controls(text: str, *, keep_newlines: bool = False) -> str:
    r"""`text` with every character that does not print written as Python writes it in a literal.

    Control characters can move the cursor or recolour a terminal, directional marks can reverse
    what a reader sees, lone surrogates (undecodable bytes of file names) cannot be written at all.

    Parameters
    ----------
    text : str
    keep_newlines : bool
        Leave line feeds alone, for messages of several lines.

    Examples
    --------
    >>> escape_controls("a\x1b[2Jb")
    'a\\x1b[2Jb'
    """
    return "".join(
        c if c.isprintable() or (keep_newlines and c == "\n") else c.encode("unicode_escape").decode("ascii")
        for c in text
    )
