"""Text from outside as it is shown: on one line, of bounded length, and unable to steer a terminal."""

from __future__ import annotations

LONGEST = 400  # characters


def shown(text: str, longest: int = LONGEST) -> str:
    r"""Write what does not print as its escape, and leave the middle out of what is too long.

    Parameters
    ----------
    text : str
        A name, a tag, a cell, a message that holds one of them.
    longest : int
        Characters to keep.

    Returns
    -------
    str
        `a\nb` for a line break between a and b; beginning and end of what is too long, ` ... ` between them.
    """
    half = longest // 2
    kept = text if len(text) <= longest else f"{text[:half]} ... {text[-half:]}"
    return kept if kept.isprintable() else "".join(map(_escaped, kept))


def _escaped(character: str) -> str:
    return character if character.isprintable() else repr(character)[1:-1]
