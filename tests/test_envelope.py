"""A notice as it goes over the line: mail, event, signature, and the secret that it is made with."""

from __future__ import annotations

import hashlib
import hmac
import json
import re
import string
from base64 import b64decode, b64encode
from dataclasses import replace
from datetime import datetime
from pathlib import Path

import pytest
from cloudevents.core.bindings.http import HTTPMessage, from_structured_event

from ingest.errors import OutletError
from ingest.outbox import Notice
from monitor.credentials import HIDDEN, Secret, secret_of
from monitor.envelope import cloud_event, headers, mail, signed
from monitor.notices import letters
from tests.notices_made import HOOK, NOW, unit_with
from tests.test_notices import change

MAIL = replace(
    HOOK, kind="email", address="shift@plant.example", sender="outlet@plant.example",
    server="mail.plant.example", port=587, user="outlet",
)  # fmt: skip


def notice() -> Notice:
    [one] = letters(unit_with(HOOK), [change()], {"made-1": 1}, NOW)
    return Notice(one.notice, NOW, one.kind, one.target, one.body, "waiting", 0, NOW, "", None, "")


def test_a_signature_is_that_of_the_example_of_the_standard():
    # RFC 9421, appendix B.2.5 (from memory; HMAC-SHA256 would not give this value for any other input)
    key = b64decode(
        "uzvJfB4u3N0Jy4T7NZ75MDVcr8zSTInedJtkgcu46YW4XByzNJjxBdtjUkdJPBtbmHhIDi6pcl8jsasjlTMtDQ=="
    )
    components = (
        ("date", "Tue, 20 Apr 2021 02:07:55 GMT"),
        ("@authority", "example.com"),
        ("content-type", "application/json"),
    )
    covered, signature = signed(components, ';created=1618884473;keyid="test-shared-secret"', key)
    assert covered == '("date" "@authority" "content-type");created=1618884473;keyid="test-shared-secret"'
    assert signature == "pxcQw6G3AjtMBQjwo8XzkZf/bws5LelbaMk5rGIGtE8="


def test_a_receiver_that_follows_the_standard_finds_the_signature_right_and_any_change_of_the_body_wrong():
    body = cloud_event(notice())
    sent = headers(body, HOOK, "a key", NOW)
    # RFC 9530: sha-256=:base64:
    assert sent["Content-Digest"] == f"sha-256=:{b64encode(hashlib.sha256(body).digest()).decode()}:"
    covered = sent["Signature-Input"].partition("=")[2]
    # 2026-03-05T12:00:00Z is 1772712000 s since 1970 (date -u -d)
    assert covered.endswith(';created=1772712000;keyid="desk";alg="hmac-sha256"')
    values = {
        "@method": "POST",
        "@target-uri": HOOK.url,
        **{name.lower(): value for name, value in sent.items()},
    }
    names = re.findall(r'"([^"]+)"', covered.partition(")")[0])
    assert names == ["@method", "@target-uri", "content-type", "content-digest"]
    base = "".join(f'"{name}": {values[name]}\n' for name in names) + f'"@signature-params": {covered}'
    expected = b64encode(hmac.new(b"a key", base.encode(), hashlib.sha256).digest()).decode()
    assert sent["Signature"] == f"outlet=:{expected}:"
    assert headers(body + b" ", HOOK, "a key", NOW)["Signature"] != sent["Signature"]
    assert set(headers(body, HOOK, "", NOW)) == {"Content-Type", "Content-Digest"}


def test_an_event_is_one_that_the_standards_own_library_reads_and_has_what_the_standard_wants():
    one = notice()
    body = cloud_event(one)
    read = from_structured_event(HTTPMessage({"content-type": "application/cloudevents+json"}, body))
    assert (read.get_id(), read.get_type(), read.get_subject()) == (one.id, "outlet.alert.raised", "made-1")
    assert read.get_time() == NOW
    assert read.get_data()["alerts"][0]["value"] == 45.214
    # CloudEvents 1.0.2: four attributes are required and not empty; names are a-z and 0-9, at most 20 long;
    # the time is RFC 3339
    event = json.loads(body)
    assert event["specversion"] == "1.0"
    assert all(
        isinstance(event[name], str) and event[name] for name in ("id", "source", "specversion", "type")
    )
    assert all(set(name) <= set(string.ascii_lowercase + string.digits) and len(name) <= 20 for name in event)
    assert datetime.fromisoformat(event["time"]).tzinfo is not None
    assert re.fullmatch(r"/[A-Za-z0-9/_-]+", event["source"])  # a URI-reference


def test_what_is_sent_again_is_the_same_byte_by_byte():
    assert cloud_event(notice()) == cloud_event(notice())
    assert mail(notice(), MAIL).as_bytes() == mail(notice(), MAIL).as_bytes()


def test_a_mail_is_plain_text_in_ascii_lines_with_an_id_that_follows_from_the_notice():
    one = notice()
    message = mail(one, MAIL)
    assert message["Message-ID"] == f"<{one.id}@plant.example>"
    assert message["Date"] == "Thu, 05 Mar 2026 12:00:00 +0000"
    assert message["Subject"].startswith("[high] ")
    assert message["Auto-Submitted"] == "auto-generated"  # RFC 3834
    assert message.get_content_type() == "text/plain"
    assert message.get_content() == one.body["text"]
    raw = message.as_bytes()
    assert raw.isascii()
    assert max(map(len, raw.split(b"\r\n"))) <= 998  # RFC 5322, 2.1.1


def test_a_secret_comes_from_the_environment_or_a_file_that_nobody_else_may_read(tmp_path: Path):
    file = tmp_path / "mail.secret"
    file.write_text("word\n", encoding="utf-8")
    file.chmod(0o600)
    of_file, named = replace(MAIL, secret_file=file), replace(MAIL, **{"secret_env": "A_NAME"})
    assert secret_of(of_file).value == "word"
    assert secret_of(named, {"A_NAME": "other"}).value == "other"
    assert secret_of(HOOK).value == ""
    for mode in (0o640, 0o604, 0o620, 0o610):
        file.chmod(mode)
        with pytest.raises(OutletError, match=rf"others may read it \(mode {mode:o}\)\n  Run chmod 600 "):
            secret_of(of_file)
    file.chmod(0o600)
    file.write_text("\n", encoding="utf-8")
    with pytest.raises(OutletError, match="holds no secret"):
        secret_of(of_file)
    file.unlink()
    with pytest.raises(OutletError, match=r"mail\.secret: No such file"):
        secret_of(of_file)
    with pytest.raises(OutletError, match="A_NAME is not set"):
        secret_of(named, {})


def test_a_secret_does_not_show_itself_in_any_form_that_goes_over_the_line():
    secret = Secret("a word/with ~", "outlet")
    plain = b64encode(b"a word/with ~").decode()
    sasl = b64encode(b"\0outlet\0a word/with ~").decode()  # RFC 4616
    said = f"no: a word/with ~, {plain}, {sasl}, a%20word%2Fwith%20~"
    assert secret.hide(said) == f"no: {HIDDEN}, {HIDDEN}, {HIDDEN}, {HIDDEN}"
    assert "word" not in repr(secret)
    assert Secret().hide("as it is") == "as it is"
