"""Servers that receive notices on this computer: a mail server with TLS and login, a fallible webhook."""

from __future__ import annotations

import json
import ssl
import subprocess
import threading
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from email import message_from_bytes, policy
from email.message import EmailMessage
from http.server import BaseHTTPRequestHandler, ThreadingHTTPServer
from pathlib import Path
from typing import Any

from aiosmtpd.controller import Controller
from aiosmtpd.smtp import SMTP, AuthResult, LoginPassword

USER, SECRET = "outlet", "tr0ub4dor-and-3 ~secret"


def certificate(folder: Path) -> Path:
    """A certificate for localhost and its key in one file, good for a day."""
    path = folder / "server.pem"
    words = (
        "openssl req -x509 -newkey ec -pkeyopt ec_paramgen_curve:prime256v1 -nodes -days 1"
        f" -subj /CN=localhost -addext subjectAltName=DNS:localhost -keyout {folder}/key.pem"
        f" -out {folder}/cert.pem"
    )
    subprocess.run(words.split(), check=True, capture_output=True)
    path.write_bytes((folder / "key.pem").read_bytes() + (folder / "cert.pem").read_bytes())
    return path


def server_side(pem: Path) -> ssl.SSLContext:
    """TLS as a server with that certificate speaks it."""
    context = ssl.SSLContext(ssl.PROTOCOL_TLS_SERVER)
    context.load_cert_chain(pem)
    return context


@dataclass
class Mailbox:
    """What a mail server received, in order; `answer` is what it says to a message."""

    port: int = 0
    messages: list[EmailMessage] = field(default_factory=list)
    answer: str = "250 kept"

    async def handle_DATA(self, server: Any, session: Any, envelope: Any) -> str:  # noqa: N802 - the library's
        """Keep a message, or refuse it."""
        if self.answer.startswith("250"):
            made = message_from_bytes(envelope.content, policy=policy.default)
            assert isinstance(made, EmailMessage)
            self.messages.append(made)
        return self.answer

    @property
    def ids(self) -> list[str]:
        """Message-IDs, without angle brackets and domain."""
        return [str(one["Message-ID"]).strip("<>").partition("@")[0] for one in self.messages]


def _login(server: Any, session: Any, envelope: Any, mechanism: str, data: Any) -> AuthResult:
    fine = isinstance(data, LoginPassword) and (data.login, data.password) == (USER.encode(), SECRET.encode())
    return AuthResult(success=fine, handled=False)


@contextmanager
def mail_server(pem: Path | None, *, implicit: bool = False, port: int = 0) -> Iterator[Mailbox]:
    """A real mail server: with a certificate it wants TLS and the login of USER."""
    box, tls = Mailbox(), server_side(pem) if pem else None
    secured = {"require_starttls": tls is not None and not implicit, "auth_required": tls is not None}
    words = {**secured, "tls_context": None if implicit else tls, "authenticator": _login, "hostname": "made"}
    if implicit:
        words["auth_require_tls"] = False  # the line is secured already, of which the library does not know

    class Server(Controller):
        def factory(self) -> SMTP:
            return SMTP(self.handler, **words)

    server = Server(
        box, hostname="127.0.0.1", port=port or _free_port(), ssl_context=tls if implicit else None
    )
    server.start()
    box.port = server.port
    try:
        yield box
    finally:
        server.stop()


def _free_port() -> int:
    with ThreadingHTTPServer(("127.0.0.1", 0), BaseHTTPRequestHandler) as one:
        return int(one.server_address[1])


@dataclass
class Desk:
    """What a webhook received, in order; `answer` says what to do with a request: a status, or a wait [s]."""

    port: int = 0
    requests: list[tuple[dict[str, str], bytes]] = field(default_factory=list)
    paths: list[str] = field(default_factory=list)
    answer: Callable[[int], int | float] = lambda number: 204

    @property
    def url(self) -> str:
        """Where notices are posted to."""
        return f"http://127.0.0.1:{self.port}/alerts"

    @property
    def ids(self) -> list[str]:
        """The `id` of each event."""
        return [str(json.loads(body)["id"]) for _, body in self.requests]


@contextmanager
def webhook(pem: Path | None = None, port: int = 0) -> Iterator[Desk]:
    """A real web server; a request is kept before it is answered, as by one that dies just then."""
    desk = Desk()

    class Handler(BaseHTTPRequestHandler):
        def do_POST(self) -> None:
            body = self.rfile.read(int(self.headers["Content-Length"]))
            desk.requests.append(({name.lower(): value for name, value in self.headers.items()}, body))
            desk.paths.append(self.path)
            told = desk.answer(len(desk.requests))
            if isinstance(told, float):
                time.sleep(told)
                told = 0
            if told:
                self.send_response(int(told))
                if told in (301, 302, 307, 308):
                    self.send_header("Location", f"http://127.0.0.1:{desk.port}/elsewhere")
                self.send_header("Content-Length", "0")
                self.end_headers()

        def log_message(self, *words: Any) -> None:
            """Say nothing."""

    server = ThreadingHTTPServer(("127.0.0.1", port), Handler)
    if pem is not None:
        server.socket = server_side(pem).wrap_socket(server.socket, server_side=True)
    desk.port = int(server.server_address[1])
    thread = threading.Thread(target=server.serve_forever, kwargs={"poll_interval": 0.02}, daemon=True)
    thread.start()
    try:
        yield desk
    finally:
        server.shutdown()
        server.server_close()
        thread.join()
