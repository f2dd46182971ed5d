"""What has to hold for where notices go: addresses, quiet hours, connections, the place of the secret."""

from __future__ import annotations

import re
from collections.abc import Iterator
from pathlib import Path
from urllib.parse import urlsplit

from ingest.draft import Draft, twice, undeclared
from ingest.entries import Entry, missing
from ingest.errors import Problem
from ingest.keys import rows
from ingest.unit import PRIORITIES, Target

NEEDS = {"email": ("address", "from", "server"), "webhook": ("url",)}
OF_EMAIL = ("address", "from", "server", "port", "user")
PORTS = {"starttls": 587, "implicit": 465, "none": 25}  # RFC 6409, RFC 8314, RFC 5321
NEAR = ("localhost", "127.0.0.1", "::1")  # what is sent there does not leave this computer
_NAME = re.compile(r"[A-Za-z0-9][A-Za-z0-9_-]*")
_ADDRESS = re.compile(r"[A-Za-z0-9.!#$%&'*+/=?^_`{|}~-]+@[A-Za-z0-9.-]+")
_HOST = re.compile(r"[A-Za-z0-9.-]+|[0-9a-fA-F:]+")


def hold(draft: Draft) -> Iterator[Problem]:
    """Yield what is wrong with targets: each can be reached, and nothing secret goes out in the clear.

    Parameters
    ----------
    draft : Draft
        The file.
    """
    yield from twice(draft.many["notify"], "name", "give each target its own name")
    for entry in draft.many["notify"]:
        if (name := entry.get("name")) and not _NAME.fullmatch(name):
            yield Problem(entry.at("name"), f"'{name}' cannot name a target", "use letters, digits, - and _")
        yield from _fits_its_kind(entry)
        yield from _addresses(entry)
        yield from _is_secured(entry)
        for key in ("priorities", "quiet_exempt"):
            yield from undeclared(entry, key, entry.get(key) or (), PRIORITIES, "priority")
        yield from _quiet_hours(entry)


def _fits_its_kind(entry: Entry) -> Iterator[Problem]:
    """What the kind needs is there, and what belongs to the other is not."""
    kind = entry.get("kind")
    if kind is None:
        return
    yield from (missing(rows("notify")[k], entry.at(k)) for k in NEEDS[kind] if entry.lacks(k))
    for key in ("url",) if kind == "email" else OF_EMAIL:
        if entry.get(key) is not None:
            yield Problem(entry.at(key), f"does not belong to kind '{kind}'", "leave it out")


def _addresses(entry: Entry) -> Iterator[Problem]:
    """Addresses can be used as they stand."""
    for key in ("address", "from"):
        if (stated := entry.get(key)) and not _ADDRESS.fullmatch(stated):
            yield Problem(entry.at(key), f"'{stated}' is not one e-mail address", "write name@host in ASCII")
    if (host := entry.get("server")) and not _HOST.fullmatch(host):
        yield Problem(
            entry.at("server"), f"'{host}' is not a host name", "write the name alone, without port"
        )
    for key in ("url", "page"):
        if (stated := entry.get(key)) and not _is_web(stated):
            what = "is not a web address of this form, without user, # or blanks"
            yield Problem(entry.at(key), what, "write https://host/path")


def _is_web(address: str) -> bool:
    """Whether an address is http or https, in ASCII, with a host and without user, fragment or blanks."""
    try:
        parts = urlsplit(address)
        is_port_fine = parts.port != 0
    except ValueError:
        return False
    return (
        parts.scheme in ("http", "https")
        and bool(parts.hostname)
        and is_port_fine
        and address.isascii()
        and not set(address) & set(" @#\\")
    )


def _is_secured(entry: Entry) -> Iterator[Problem]:
    """Nothing goes out in the clear but to this computer, and there is one place for a secret."""
    server, url, user = entry.get("server"), entry.get("url"), entry.get("user")
    if server and entry.get("tls") == "none" and server not in NEAR:
        yield Problem(entry.at("tls"), f"'none' sends in the clear to {server}", 'write tls = "starttls"')
    if url and _is_web(url) and urlsplit(url).scheme == "http" and urlsplit(url).hostname not in NEAR:
        yield Problem(entry.at("url"), "http sends in the clear to another computer", "write https://")
    stated = [key for key in ("secret_env", "secret_file") if entry.get(key) is not None]
    if len(stated) == 2:
        yield Problem(entry.at("secret_file"), "secret_env is stated too", "leave one of the two out")
    if user and entry.lacks("secret_env") and entry.lacks("secret_file"):
        yield missing(rows("notify")["secret_env"], entry.at("secret_env"))
    if stated and entry.get("kind") == "email" and entry.lacks("user"):
        yield missing(rows("notify")["user"], entry.at("user"))


def _quiet_hours(entry: Entry) -> Iterator[Problem]:
    """Quiet hours have two different ends."""
    first, last = entry.get("quiet_from"), entry.get("quiet_to")
    for key, other in (("quiet_from", last), ("quiet_to", first)):
        if other is not None and entry.lacks(key):
            yield missing(rows("notify")[key], entry.at(key))
    if first is not None and first == last:
        yield Problem(entry.at("quiet_to"), "quiet hours end when they begin", "write two different times")


def target(entry: Entry, folder: Path) -> Target:
    """Make a target without faults; paths are relative to the folder of the unit file.

    Parameters
    ----------
    entry : Entry
        A section `notify`.
    folder : Path
        Of the unit file.

    Returns
    -------
    Target
    """
    secret, authority, first = entry.get("secret_file"), entry.get("ca_file"), entry.get("quiet_from")
    return Target(
        name=entry.get("name"),
        kind=entry.get("kind"),
        priorities=entry.get("priorities"),
        quiet=None if first is None else (first, entry.get("quiet_to")),
        quiet_exempt=entry.get("quiet_exempt"),
        per_hour=round(entry.get("per_hour")),
        page=entry.get("page") or "",
        secret_env=entry.get("secret_env") or "",
        secret_file=folder / secret if secret else None,
        ca_file=folder / authority if authority else None,
        url=entry.get("url") or "",
        address=entry.get("address") or "",
        sender=entry.get("from") or "",
        server=entry.get("server") or "",
        port=round(entry.get("port") or PORTS[entry.get("tls")]),
        tls=entry.get("tls"),
        user=entry.get("user") or "",
    )
