"""Sending one notice by SMTP to a mail server or by HTTP to a webhook: it arrived, or there is a reason."""

from __future__ import annotations

import http.client
import smtplib
import ssl
from contextlib import suppress
from datetime import datetime
from urllib.parse import urlsplit

from ingest.errors import OutletError
from ingest.outbox import Notice
from ingest.shown import shown
from ingest.unit import Target
from monitor.credentials import Secret, secret_of
from monitor.envelope import cloud_event, headers, mail

TIMEOUT_S = 15.0  # for each answer of a server
MOST_WORDS = 300  # characters of a server's answer that are kept
MOVED = range(300, 400)  # statuses of HTTP
REFUSED = (400, 413, 422)  # those that are about this one body; the others are about every one


class Undelivered(Exception):  # noqa: N818 - not an error that ends a command: it is tried again
    """A notice did not arrive, as far as can be told.

    Parameters
    ----------
    words : str
        Why; without any secret.
    is_unreachable : bool
        Whether the target takes nothing at all now, rather than refuse this notice.
    """

    def __init__(self, words: str, *, is_unreachable: bool) -> None:
        """Keep the reason as one line."""
        super().__init__(words)
        self.is_unreachable = is_unreachable


def send(notice: Notice, target: Target, now: datetime, timeout_s: float = TIMEOUT_S) -> None:
    """Send a notice; when this returns the server has taken it over.

    Parameters
    ----------
    notice : Notice
    target : Target
        Whom it is for.
    now : datetime
        With a zone.
    timeout_s : float
        For each answer of the server [s].

    Raises
    ------
    Undelivered
        Anything else; it may have arrived all the same, and is to be sent again under the same id.
    """
    secret = Secret()
    try:
        secret = secret_of(target)
        if target.kind == "email":
            _mail(notice, target, secret, timeout_s)
        else:
            _post(notice, target, secret, now, timeout_s)
    except OutletError as fault:
        raise Undelivered(secret.hide(f"{fault.what}; {fault.remedy}"), is_unreachable=True) from None
    except smtplib.SMTPException as fault:
        refused_this = isinstance(fault, smtplib.SMTPDataError)
        raise Undelivered(_told(fault, secret), is_unreachable=not refused_this) from None
    except (OSError, http.client.HTTPException, UnicodeError) as fault:
        raise Undelivered(_told(fault, secret), is_unreachable=True) from None


def _told(fault: Exception, secret: Secret) -> str:
    """A fault as one line of bounded length, without the secret."""
    words = str(fault)
    if isinstance(fault, smtplib.SMTPRecipientsRefused):
        words = "; ".join(_answer(*answer) for answer in fault.recipients.values())
    elif isinstance(fault, smtplib.SMTPResponseException):
        words = _answer(fault.smtp_code, fault.smtp_error)
    elif isinstance(fault, ssl.SSLCertVerificationError):
        words = f"its certificate is not accepted: {fault.verify_message}"
    elif TimeoutError in (type(fault), type(fault.__context__)):  # smtplib makes another one of it
        words = "no answer in time"
    return shown(secret.hide(words or type(fault).__name__))[:MOST_WORDS]


def _answer(code: int, words: bytes | str) -> str:
    text = words.decode("utf-8", "replace") if isinstance(words, bytes) else words
    return f"the mail server answers {code} {text}"


def _mail(notice: Notice, target: Target, secret: Secret, timeout_s: float) -> None:
    """Hand a notice to the mail server; no password goes over a line that is not secured."""
    context = _context(target)
    if target.user and not (target.user + secret.value).isascii():
        raise OutletError(
            f"notify[{target.name}]: user or password hold other characters than ASCII",
            remedy="Give the account a password of ASCII characters.",
        )
    if target.tls == "implicit":
        server: smtplib.SMTP = smtplib.SMTP_SSL(
            target.server, target.port, timeout=timeout_s, context=context
        )
    else:
        server = smtplib.SMTP(target.server, target.port, timeout=timeout_s)
    try:
        if target.tls == "starttls":
            server.starttls(context=context)
        if target.user:
            server.login(target.user, secret.value)
        server.send_message(mail(notice, target), target.sender, [target.address])
        with suppress(OSError, smtplib.SMTPException):  # what it says to a goodbye changes nothing any more
            server.quit()
    finally:
        server.close()


def _post(notice: Notice, target: Target, secret: Secret, now: datetime, timeout_s: float) -> None:
    """Post a notice; only a status from 200 to 299 says that it was taken over. No redirect is followed."""
    parts, body = urlsplit(target.url), cloud_event(notice)
    host = parts.hostname or ""
    if parts.scheme == "https":
        line: http.client.HTTPConnection = http.client.HTTPSConnection(
            host, parts.port, timeout=timeout_s, context=_context(target)
        )
    else:
        line = http.client.HTTPConnection(host, parts.port, timeout=timeout_s)
    path = (parts.path or "/") + (f"?{parts.query}" if parts.query else "")
    try:
        line.request("POST", path, body, headers(body, target, secret.value, now))
        with line.getresponse() as answer:
            status, reason = answer.status, shown(secret.hide(answer.reason))[:MOST_WORDS]
    finally:
        line.close()
    if status in MOVED:
        words = f"answers {status}: it has moved; write the address where it is now"
        raise Undelivered(words, is_unreachable=True)
    if not http.client.OK <= status < MOVED.start:
        raise Undelivered(f"answers {status} {reason}".strip(), is_unreachable=status not in REFUSED)


def _context(target: Target) -> ssl.SSLContext:
    """Check certificates and host names, against the plant's own authority where one is stated."""
    try:
        return ssl.create_default_context(cafile=target.ca_file)
    except OSError as fault:  # an SSLError is one
        raise OutletError(
            f"notify[{target.name}].ca_file: {target.ca_file}: {fault.strerror or 'holds no certificate'}",
            remedy="Name a file of certificates in PEM.",
        ) from fault
