"""Secrets of targets: read when needed, never written, and hidden wherever words from outside show them."""

from __future__ import annotations

import os
import stat
from base64 import b64encode
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from urllib.parse import quote

from ingest.errors import OutletError
from ingest.unit import Target

HIDDEN = "(hidden)"
LARGEST = 4096  # bytes that a file of one secret may have


@dataclass(frozen=True, slots=True)
class Secret:
    """A secret that does not show itself; empty where a target needs none."""

    value: str = field(default="", repr=False)
    user: str = field(default="", repr=False)

    def hide(self, words: str) -> str:
        """Take the secret out of words from outside, in every form in which it goes over the line.

        Parameters
        ----------
        words : str
            Such as a server's answer.

        Returns
        -------
        str
        """
        if not self.value:
            return words
        plain = self.value.encode()
        login = b"\0".join((b"", self.user.encode(), plain))  # SASL PLAIN, RFC 4616
        forms = (self.value, b64encode(plain).decode(), b64encode(login).decode(), quote(self.value, safe=""))
        for form in sorted(forms, key=len, reverse=True):
            words = words.replace(form, HIDDEN)
        return words


def secret_of(target: Target, environment: Mapping[str, str] = os.environ) -> Secret:
    """Read the secret of a target.

    Parameters
    ----------
    target : Target
    environment : mapping of str

    Returns
    -------
    Secret
        Empty where the target names none.

    Raises
    ------
    OutletError
        Not there, empty, or readable by others.
    """
    if target.secret_env:
        value = environment.get(target.secret_env, "")
        if not value or not value.isprintable():
            raise OutletError(
                f"notify[{target.name}].secret_env: {target.secret_env} is not set to one line of text",
                remedy="Set this variable for the account that runs the program.",
            )
        return Secret(value, target.user)
    if target.secret_file is not None:
        return Secret(_read(target, target.secret_file), target.user)
    return Secret()


def _read(target: Target, path: Path) -> str:
    """Read a file of one secret that nobody else may read."""
    place = f"notify[{target.name}].secret_file: {path}"
    try:
        with path.open("rb") as file:
            about = os.fstat(file.fileno())
            value = file.read(LARGEST + 1) if stat.S_ISREG(about.st_mode) else b""
    except OSError as fault:
        raise OutletError(f"{place}: {fault.strerror}", remedy="Check its name and owner.") from fault
    if os.name == "posix" and stat.S_IMODE(about.st_mode) & 0o077:
        mode = f"{stat.S_IMODE(about.st_mode):o}"
        raise OutletError(f"{place}: others may read it (mode {mode})", remedy=f"Run chmod 600 {path}.")
    try:
        text = value.decode().strip()
    except UnicodeDecodeError:
        text = ""
    if not text or not text.isprintable() or len(value) > LARGEST:
        raise OutletError(f"{place}: holds no secret", remedy="Write the secret as its one line, in UTF-8.")
    return text
