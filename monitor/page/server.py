"""What the server runs: the page behind a guard that checks the host's name and adds security headers."""

from __future__ import annotations

import logging
from collections.abc import Awaitable, Callable, MutableMapping
from typing import Any

import streamlit as st
from starlette.middleware import Middleware

from ingest.errors import OutletError
from monitor.page import shell
from monitor.page.launch import HOSTS

Message = MutableMapping[str, Any]
Receive = Callable[[], Awaitable[Message]]
Send = Callable[[Message], Awaitable[None]]
AsgiApp = Callable[[Message, Receive, Send], Awaitable[None]]

# Scripts, fonts and sockets come from here and nowhere else. Styles are written inline by the widgets.
POLICY = "; ".join(
    [
        "default-src 'self'", "script-src 'self'", "style-src 'self' 'unsafe-inline'",
        "img-src 'self' data: blob:",
        "font-src 'self' data:", "connect-src 'self'", "worker-src 'self' blob:", "object-src 'none'",
        "base-uri 'none'", "form-action 'self'", "frame-ancestors 'none'",
    ]
)  # fmt: skip
HEADERS = (
    (b"content-security-policy", POLICY.encode()),
    (b"x-content-type-options", b"nosniff"),
    (b"x-frame-options", b"DENY"),
    (b"referrer-policy", b"no-referrer"),
    (b"permissions-policy", b"camera=(), geolocation=(), microphone=(), payment=(), usb=()"),
    (b"cross-origin-opener-policy", b"same-origin"),
    (b"cross-origin-resource-policy", b"same-origin"),
)


class Guard:
    """Refuses requests under a foreign host name and adds the security headers to every answer."""

    def __init__(self, app: AsgiApp) -> None:
        """Stand before an application."""
        self._app = app

    async def __call__(self, scope: Message, receive: Receive, send: Send) -> None:
        """Answer one request or hand it on."""
        if scope["type"] != "http":
            # Sockets have their own check of host and origin (server.allowedHosts).
            await self._app(scope, receive, send)
        elif _host(scope) not in HOSTS:
            await send({"type": "http.response.start", "status": 403, "headers": list(HEADERS)})
            await send({"type": "http.response.body", "body": b"unknown host name\n"})
        else:
            await self._app(scope, receive, _with_headers(send))


def _host(scope: Message) -> str:
    """Name in the Host header without its port."""
    named = dict(scope["headers"]).get(b"host", b"")
    return str(named.decode("latin-1")).rsplit(":", 1)[0].lower()


def _with_headers(send: Send) -> Send:
    """Add the headers to the first message of an answer; one that is there already is replaced."""
    ours = {name for name, _ in HEADERS}

    async def guarded(message: Message) -> None:
        if message["type"] == "http.response.start":
            kept = [(name, value) for name, value in message.get("headers", []) if name.lower() not in ours]
            message["headers"] = [*kept, *HEADERS]
        await send(message)

    return guarded


def told(fault: Exception) -> bool:
    """Say a fault in our own words; what is ours to mend goes to the server's log with its traceback.

    Parameters
    ----------
    fault : Exception
        What a view raised.

    Returns
    -------
    bool
        True: nothing else is shown.
    """
    if isinstance(fault, OutletError):
        shell.empty(fault.what, fault.remedy)
    else:
        logging.getLogger(__name__).error("a view failed", exc_info=fault)
        shell.empty(
            "This view has a fault of its own; the figures in the store are not touched.",
            "Tell whoever looks after this program; the server's log says where it happened.",
        )
    return True


app = st.App("app.py", middleware=[Middleware(Guard)], on_script_error=told)
