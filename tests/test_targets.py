"""Where notices go, as a unit file states it: what is read of it, and what is refused with words."""

from __future__ import annotations

from datetime import time
from pathlib import Path

import pytest

from ingest.errors import UnitFileError
from ingest.unit import Target
from tests.unitfiles_made import DEMO, loaded

MAIL = """
[[notify]]
name = "shift"
kind = "email"
address = "shift@plant.example"
from = "outlet@plant.example"
server = "mail.plant.example"
user = "outlet"
secret_file = "mail.secret"
"""
HOOK = '\n[[notify]]\nname = "desk"\nkind = "webhook"\nurl = "https://desk.plant.example/alerts"\n'


def targets(folder: Path, text: str) -> tuple[Target, ...]:
    return loaded(folder, DEMO + text).targets


def test_an_email_target_has_the_ports_of_the_standards_and_its_files_beside_the_unit_file(tmp_path: Path):
    # RFC 6409 (submission, 587), RFC 8314 (implicit TLS, 465)
    [one] = targets(tmp_path, MAIL + 'quiet_from = "22:00"\nquiet_to = "06:00"\nca_file = "ca.pem"\n')
    assert (one.port, one.tls, one.per_hour) == (587, "starttls", 12)
    assert (one.secret_file, one.ca_file) == (tmp_path / "mail.secret", tmp_path / "ca.pem")
    assert (one.quiet, one.quiet_exempt) == ((time(22), time(6)), ("high",))
    assert one.priorities == ("high", "medium", "low")
    [other] = targets(tmp_path, MAIL + 'tls = "implicit"\n')
    assert other.port == 465


def test_a_webhook_needs_an_address_alone_and_http_is_for_this_computer_only(tmp_path: Path):
    [one] = targets(tmp_path, HOOK)
    assert (one.url, one.secret_env, one.secret_file) == ("https://desk.plant.example/alerts", "", None)
    [near] = targets(tmp_path, HOOK.replace("https://desk.plant.example", "http://127.0.0.1:8080"))
    assert near.url == "http://127.0.0.1:8080/alerts"


BAD = {
    "http to another computer": (HOOK.replace("https", "http"), r"notify\[desk\]\.url: http sends in the"),
    "no scheme": (HOOK.replace("https://", ""), r"notify\[desk\]\.url: is not a web address"),
    "a user in the address": (HOOK.replace("//", "//me:word@"), r"notify\[desk\]\.url: is not a web address"),
    "another port than a number": (
        HOOK.replace("plant.example", "plant.example:x"), r"notify\[desk\]\.url: is not a web",
    ),
    "mail in the clear": (MAIL + 'tls = "none"\n', r"notify\[shift\]\.tls: 'none' sends in the clear"),
    "a login without a secret": (
        MAIL.replace('secret_file = "mail.secret"', ""), r"notify\[shift\]\.secret_env: missing",
    ),
    "two places for a secret": (MAIL + 'secret_env = "A"\n', "secret_file: secret_env is stated too"),
    "a secret for nobody": (MAIL.replace('user = "outlet"', ""), r"notify\[shift\]\.user: missing"),
    "two addresses in one": (MAIL.replace("shift@", "a@b,shift@"), "is not one e-mail address"),
    "a name in front": (MAIL.replace('"shift@plant.example"', '"S <s@plant.example>"'), "is not one e-mail"),
    "a port in the server": (MAIL.replace("mail.plant.example", "mail.plant.example:25"), "not a host name"),
    "an email without server": (
        MAIL.replace('server = "mail.plant.example"', ""), r"notify\[shift\]\.server: missing",
    ),
    "a webhook with an address": (HOOK + 'address = "a@b.example"\n', "does not belong to kind 'webhook'"),
    "an unknown priority": (HOOK + 'priorities = ["hihg"]\n', "'hihg' is no priority; did you mean 'high'"),
    "half of the quiet hours": (HOOK + 'quiet_from = "22:00"\n', r"notify\[desk\]\.quiet_to: missing"),
    "quiet hours that are none": (
        HOOK + 'quiet_from = "22:00"\nquiet_to = "22:00"\n', "quiet hours end when they begin",
    ),
    "no time of day": (HOOK + 'quiet_from = "24:00"\nquiet_to = "06:00"\n', "'24:00' is not a time of day"),
    "two of one name": (HOOK + HOOK, r"'desk' already belongs to notify\[desk\]"),
    "a name with a blank": (HOOK.replace('"desk"', '"the desk"'), "'the desk' cannot name a target"),
}  # fmt: skip


@pytest.mark.parametrize("case", BAD)
def test_what_cannot_be_used_or_would_send_in_the_clear_is_refused(tmp_path: Path, case: str):
    text, said = BAD[case]
    with pytest.raises(UnitFileError, match=said):
        targets(tmp_path, text)
