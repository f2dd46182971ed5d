"""What the commands print about notices: what arrived, what waits and why, and what was given up."""

from __future__ import annotations

from collections.abc import Iterable, Iterator

from monitor.posting import Posted


def posted(results: Iterable[Posted]) -> Iterator[str]:
    """Tell what became of the notices of each target.

    Parameters
    ----------
    results : iterable of Posted

    Yields
    ------
    str
        One line each, then one for each notice that was given up.
    """
    nobody = True
    for one in results:
        nobody = False
        yield f"{one.unit}/{one.target}: {one.sent} sent, {one.waiting} waiting"
        yield from (f"  given up: {subject}" for subject in one.given_up)
    if nobody:
        yield "no unit file names a target of notices"


def troubles(results: Iterable[Posted]) -> Iterator[str]:
    """Tell why notices wait.

    Parameters
    ----------
    results : iterable of Posted

    Yields
    ------
    str
        Two lines for each target that takes none.
    """
    for one in results:
        if one.trouble:
            yield (
                f"{one.unit}/{one.target}: notices do not arrive: {one.trouble}\n"
                "  Put it right within a week; 'outlet notify --test' tries a target."
            )
