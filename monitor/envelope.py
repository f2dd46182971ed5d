"""A notice as it goes over the line: an e-mail, or a CloudEvent in a signed request; sent again, the same."""

from __future__ import annotations

import hashlib
import hmac
import json
from base64 import b64encode
from collections.abc import Sequence
from datetime import datetime
from email.message import EmailMessage
from email.policy import SMTP
from email.utils import format_datetime
from urllib.parse import urlsplit

from ingest.outbox import Notice
from ingest.unit import Target

CONTENT_TYPE = "application/cloudevents+json; charset=utf-8"
LABEL = "outlet"  # of our signature among others that a proxy may add


def mail(notice: Notice, target: Target) -> EmailMessage:
    """Write a notice as an e-mail of plain text.

    Parameters
    ----------
    notice : Notice
    target : Target
        Of kind 'email'.

    Returns
    -------
    EmailMessage
        Its Message-ID follows from the id of the notice, its date is that of the notice.
    """
    message = EmailMessage(policy=SMTP)
    message["From"], message["To"] = target.sender, target.address
    message["Subject"] = f"[{notice.body['priority']}] {notice.body['subject']}"
    message["Date"] = format_datetime(notice.made)
    message["Message-ID"] = f"<{notice.id}@{target.sender.rpartition('@')[2]}>"
    message["Auto-Submitted"] = "auto-generated"  # RFC 3834: nobody's absence is answered to it
    message.set_content(str(notice.body["text"]), charset="utf-8", cte="quoted-printable")
    return message


def cloud_event(notice: Notice) -> bytes:
    """Write a notice as a CloudEvent, version 1.0, structured mode (CloudEvents JSON event format 1.0.2).

    Parameters
    ----------
    notice : Notice

    Returns
    -------
    bytes
        JSON in UTF-8.
    """
    alerts = notice.body["alerts"]
    event = {
        "specversion": "1.0",
        "id": notice.id,
        "source": f"/outlet/units/{notice.body['unit']}",
        "type": f"outlet.alert.{notice.kind}",
        "time": notice.made.isoformat(),
        "datacontenttype": "application/json",
        **({"subject": alerts[0]["id"]} if alerts else {}),
        "data": dict(notice.body),
    }
    return json.dumps(event, ensure_ascii=False, allow_nan=False, sort_keys=True).encode()


def signed(components: Sequence[tuple[str, str]], parameters: str, key: bytes) -> tuple[str, str]:
    """Sign parts of a message by HMAC-SHA256 as HTTP Message Signatures do (RFC 9421, 2.5 and 3.3.3).

    Parameters
    ----------
    components : sequence of (str, str)
        Name and value of what is covered, in order.
    parameters : str
        Of the signature, such as `;created=1618884473;keyid="desk"`.
    key : bytes
        Shared with the receiver.

    Returns
    -------
    covered : str
        List of the components with the parameters, for the header Signature-Input.
    signature : str
        In base64.
    """
    names = " ".join(f'"{name}"' for name, _ in components)
    covered = f"({names}){parameters}"
    lines = [f'"{name}": {value}' for name, value in components]
    base = "\n".join([*lines, f'"@signature-params": {covered}'])
    return covered, b64encode(hmac.new(key, base.encode("ascii"), hashlib.sha256).digest()).decode()


def headers(body: bytes, target: Target, secret: str, now: datetime) -> dict[str, str]:
    """Give the headers of a request that carries an event.

    Parameters
    ----------
    body : bytes
        From `cloud_event`.
    target : Target
        Of kind 'webhook'.
    secret : str
        Shared with the receiver; empty: the request is not signed.
    now : datetime
        With a zone; told in the signature, so that an old request cannot be replayed.

    Returns
    -------
    dict of str to str
        The digest of the body as RFC 9530 has it.
    """
    digest = f"sha-256=:{b64encode(hashlib.sha256(body).digest()).decode()}:"
    found = {"Content-Type": CONTENT_TYPE, "Content-Digest": digest}
    if not secret:
        return found
    components = (
        ("@method", "POST"),
        ("@target-uri", target.url if urlsplit(target.url).path else f"{target.url}/"),
        ("content-type", CONTENT_TYPE),
        ("content-digest", digest),
    )
    parameters = f';created={int(now.timestamp())};keyid="{target.name}";alg="hmac-sha256"'
    covered, signature = signed(components, parameters, secret.encode())
    return {**found, "Signature-Input": f"{LABEL}={covered}", "Signature": f"{LABEL}=:{signature}:"}
