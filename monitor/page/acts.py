"""The page's only write: what people do about alerts and the note of a shift, each once, into the journal.

A click may come twice, and a page may be an hour old. So every act names the last line of the journal that
the page had shown about its subject, and is only done while there is no newer one.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable
from html import escape
from pathlib import Path
from threading import Lock

import streamlit as st

from ingest import journal
from ingest.errors import OutletError
from ingest.journal import Line
from monitor.page import data, shell

Act = Callable[[Path, str], Line]  # store, who

_writing = Lock()  # of the one process that serves the page
NAME = "name"  # of whoever sits at this browser; kept while the page is open
TOLD = "told"  # what became of the last act
WRITTEN = "Written to the journal."
DONE, REFUSED = "\u2713", "\u25b2"


def once(act: Act, word: str, *, unit: str, subject: str, seen: int) -> None:
    """Do an act in the name that was typed, unless its subject has a line that the page had not shown.

    Parameters
    ----------
    act : callable
        Writes one line into the journal.
    word : str
        What the journal calls the act.
    unit, subject : str
        What the line is about.
    seen : int
        Number of the last line about it that was shown.
    """
    who = str(st.session_state.get(NAME, "")).strip()
    folder = data.site()[0]
    if not who:
        refuse(subject, "Nobody is named: write your name first, then press again.")
        return
    with _writing:
        newer = [line for line in journal.lines(folder, unit=unit, after=seen) if line.subject == subject]
        if newer:
            again = (newer[-1].who, newer[-1].act) == (who, word)  # the second click of two
            st.session_state[TOLD] = (subject, again, WRITTEN if again else _newer(newer[-1]))
            return
        try:
            act(folder, who)
        except OutletError as error:
            refuse(subject, f"{error.what}. {error.remedy}")
        else:
            st.session_state[TOLD] = (subject, True, WRITTEN)


def _newer(line: Line) -> str:
    return f"{line.who} wrote about it in between ({line.act}): look at that first, then press again."


def refuse(subject: str, why: str) -> None:
    """Say that an act was not done.

    Parameters
    ----------
    subject, why : str
        What it was about, and why not, with what to do.
    """
    st.session_state[TOLD] = (subject, False, why)


def told(subject: str) -> None:
    """Say what became of the last act about a subject.

    Parameters
    ----------
    subject : str
        As for `once`.
    """
    about, done, words = st.session_state.get(TOLD, ("", True, ""))
    if about == subject:
        # No box of the framework: it would read a name as markup.
        shape, css = (DONE, "some") if done else (REFUSED, "alarm")
        shell.write(f"<p class='{css}' role='status'>{shape} {escape(words)}</p>")


def name() -> None:
    """Ask for the name that every line of the journal carries."""
    # A widget that is not drawn loses its value: the name is kept beside it.
    st.session_state[NAME] = st.session_state.get(NAME, st.session_state.get("kept name", ""))
    st.text_input("Your name, for the journal", key=NAME, width=300)
    st.session_state["kept name"] = st.session_state[NAME]


def seen(lines: Iterable[Line]) -> int:
    """Give the number of the last line that is shown about a subject.

    Parameters
    ----------
    lines : iterable of Line
        About that subject.
    """
    return max((line.number for line in lines), default=0)
