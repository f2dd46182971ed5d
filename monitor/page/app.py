"""Entry of the page: which views there are; each view is one file."""

from __future__ import annotations

import streamlit as st

from monitor.page import alerts, balance, instruments, intake, month, now, shell, trend

# A new view is one more line here.
VIEWS = (
    ("Now", "now", now.view),
    ("Trend", "trend", trend.view),
    ("Balance", "balance", balance.view),
    ("Instruments", "instruments", instruments.view),
    ("Alerts", "alerts", alerts.view),
    ("Month", "month", month.view),
    ("Intake", "intake", intake.view),
)


def main() -> None:
    """Draw the frame and the view that the address names."""
    st.set_page_config(page_title="Reactor outlet", page_icon=shell.icon(), layout="wide")
    pages = [st.Page(view, title=title, url_path=path, default=path == "now") for title, path, view in VIEWS]
    chosen = st.navigation(pages, position="hidden")
    shell.style()
    key, place = shell.header()
    if key is not None:
        try:
            chosen.run()
        finally:
            shell.links(place, pages, chosen, key)
    shell.cautions()


main()
