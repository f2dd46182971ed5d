"""Every notice arrives, none under two ids: real servers that refuse, hang, die and come back; real kills."""

from __future__ import annotations

import json
import os
import signal
import socket
import subprocess
import sys
from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor
from dataclasses import replace
from datetime import UTC, datetime, timedelta
from itertools import pairwise
from pathlib import Path

import pytest

from ingest import documents
from ingest.unit import Target
from monitor.alerts import KIND
from monitor.follow import Follower
from monitor.notices import address_of
from monitor.posting import GIVE_UP, LONGEST_PAUSE, Posted, pause, post, post_trial
from tests.notices_made import (
    HOOK,
    HOUR,
    NOW,
    empty_store,
    everything_written,
    export,
    passed,
    put,
    unit_with,
    waiting,
)
from tests.receivers_made import SECRET, USER, Desk, Mailbox, certificate, mail_server, webhook
from tests.source import ROOT
from tests.unitfiles_made import DEMO

MINUTE = timedelta(minutes=1)
pytestmark = pytest.mark.filterwarnings("ignore::UserWarning:aiosmtpd")  # of a server that asks for a login


@pytest.fixture(scope="module")
def pem(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return certificate(tmp_path_factory.mktemp("keys"))


@pytest.fixture
def store(tmp_path: Path) -> Path:
    return empty_store(tmp_path / "store")


@pytest.fixture
def desk() -> Iterator[Desk]:
    with webhook() as one:
        yield one


@pytest.fixture(autouse=True)
def secret(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("MADE_SECRET", SECRET)


def hook(desk: Desk, **changes: object) -> Target:
    return replace(HOOK, **{"url": desk.url, **changes})


def mail_to(box: Mailbox, pem: Path | None, **changes: object) -> Target:
    usual: dict[str, object] = {"address": "shift@plant.example", "sender": "outlet@plant.example"}
    usual |= {"server": "localhost", "port": box.port, "kind": "email"}
    if pem is not None:
        usual |= {"user": USER, "secret_env": "MADE_SECRET", "ca_file": pem}
    else:
        usual |= {"tls": "none"}
    return replace(HOOK, **{**usual, **changes})


def posted(store: Path, target: Target, now_h: float = 0.0, timeout_s: float = 5.0) -> Posted:
    [one] = post([unit_with(target)], store, NOW + now_h * HOUR, timeout_s=timeout_s)
    return one


def states(store: Path) -> dict[str, str]:
    return {one.id: one.state for one in waiting(store)}


@pytest.mark.parametrize("implicit", [False, True], ids=["starttls", "implicit"])
def test_a_notice_arrives_by_mail_over_tls_after_a_login(store: Path, pem: Path, implicit: bool):
    put(store, "n1", text="Yield has fallen\u00a0± 0.6 %\n")
    with mail_server(pem, implicit=implicit) as box:
        told = posted(store, mail_to(box, pem, tls="implicit" if implicit else "starttls"))
    assert (told.sent, told.waiting, told.trouble) == (1, 0, "")
    [message] = box.messages
    assert message["Message-ID"] == "<n1@plant.example>"
    assert message.get_content().splitlines() == ["Yield has fallen\u00a0± 0.6 %"]
    assert states(store) == {"n1": "sent"}


def test_a_certificate_of_nobody_we_know_is_refused_and_nothing_is_sent(store: Path, pem: Path):
    put(store, "n1")
    with mail_server(pem) as box:
        told = posted(store, mail_to(box, pem, ca_file=None))
    assert "its certificate is not accepted" in told.trouble
    with webhook(pem) as one:
        told = posted(store, hook(one, url=f"https://localhost:{one.port}/"), 1)
    assert "its certificate is not accepted" in told.trouble
    assert (box.messages, one.requests) == ([], [])
    assert states(store) == {"n1": "waiting"}


def test_a_webhook_over_tls_with_the_plants_own_authority_is_reached_and_one_of_another_name_is_not(
    store: Path, pem: Path
):
    put(store, "n1")
    with webhook(pem) as one:
        told = posted(store, hook(one, url=f"https://127.0.0.1:{one.port}/a?b=1", ca_file=pem))
        assert "IP address mismatch" in told.trouble  # the certificate is for localhost
        assert posted(store, hook(one, url=f"https://localhost:{one.port}/a?b=1", ca_file=pem), 1).sent == 1
    assert one.paths == ["/a?b=1"]


def test_a_server_without_starttls_gets_neither_login_nor_notice(store: Path, pem: Path):
    put(store, "n1")
    with mail_server(None) as box:
        told = posted(store, mail_to(box, pem))
    assert "STARTTLS" in told.trouble
    assert box.messages == []


def test_a_login_that_is_refused_is_told_without_the_secret_and_tried_again(
    store: Path, pem: Path, monkeypatch: pytest.MonkeyPatch
):
    put(store, "n1")
    monkeypatch.setenv("MADE_SECRET", "not the word")
    with mail_server(pem) as box:
        told = posted(store, mail_to(box, pem))
        assert told.trouble.startswith("the mail server answers 535")
        assert "not the word" not in told.trouble
        monkeypatch.setenv("MADE_SECRET", SECRET)
        assert posted(store, mail_to(box, pem), 1).sent == 1
    assert box.ids == ["n1"]


def test_a_secret_that_a_server_repeats_is_nowhere_in_what_is_written_or_told(store: Path, pem: Path):
    put(store, "n1")
    with mail_server(pem) as box:
        box.answer = f"554 I know you, your word is {SECRET}"
        told = posted(store, mail_to(box, pem))
    assert told.trouble == "the mail server answers 554 I know you, your word is (hidden)"
    assert b"your word is (hidden)" in everything_written(store)
    assert SECRET.encode() not in everything_written(store)
    with webhook() as one:
        posted(store, hook(one, **{"secret_env": "MADE_SECRET"}), 1)
    [(sent, body)] = one.requests
    assert "signature" in sent
    assert SECRET not in f"{sent}{body.decode()}{told}"
    assert SECRET.encode() not in everything_written(store)


def test_a_mail_server_that_is_down_for_a_day_loses_nothing(store: Path):
    with mail_server(None) as gone:
        port = gone.port
    target = mail_to(Mailbox(port), None, per_hour=4)
    tried = []
    for hour in range(24):
        put(store, f"n{hour:02d}", made=NOW + hour * HOUR)
        told = posted(store, target, hour)
        assert (told.sent, told.waiting) == (0, hour + 1)
        assert "refused" in told.trouble
        tried = [one.tries for one in waiting(store) if one.tries]
    assert sum(tried) <= 24  # one try an hour at most, whatever waits
    with mail_server(None, port=port) as box:
        for hour in range(24, 60):
            posted(store, target, hour)
    arrived = " ".join(str(one.get_content()) + str(one["Subject"]) for one in box.messages)
    assert all(f"n{hour:02d} happened" in arrived for hour in range(24))
    assert len(set(box.ids)) == len(box.ids)
    alone = {one.id for one in waiting(store) if one.state == "sent" and one.kind != "digest"}
    joined = {one.id for one in waiting(store) if one.state == "joined"}
    assert len(alone | joined) == 24
    assert not alone & joined
    assert not {one.id for one in waiting(store) if one.tries} & joined


def test_a_webhook_that_fails_gets_the_same_notice_again(store: Path, desk: Desk):
    put(store, "n1")
    desk.answer = lambda number: 500 if number == 1 else 200
    assert posted(store, hook(desk)).trouble == "answers 500 Internal Server Error"
    assert posted(store, hook(desk), 0.001).sent == 0  # at rest until its next try
    assert len(desk.requests) == 1
    assert posted(store, hook(desk), 0.1).sent == 1
    assert desk.ids == ["n1", "n1"]
    assert desk.requests[0][1] == desk.requests[1][1]


def test_a_webhook_that_hangs_is_left_in_time(store: Path, desk: Desk):
    put(store, "n1", "n2")
    desk.answer = lambda number: 1.0 if number == 1 else 200
    assert posted(store, hook(desk), timeout_s=0.2).trouble == "no answer in time"
    assert posted(store, hook(desk), 1).sent == 2
    assert sorted(desk.ids) == ["n1", "n1", "n2"]


def test_a_mail_server_that_says_nothing_is_left_in_time(store: Path):
    put(store, "n1")
    with socket.create_server(("127.0.0.1", 0)) as silent:
        told = posted(store, mail_to(Mailbox(silent.getsockname()[1]), None), timeout_s=0.2)
    assert (told.trouble, told.waiting) == ("no answer in time", 1)


def test_a_server_that_dies_once_it_has_a_notice_gets_it_again_under_the_same_id(store: Path, desk: Desk):
    put(store, "n1")
    desk.answer = lambda number: 0 if number == 1 else 202
    assert "closed connection" in posted(store, hook(desk)).trouble
    assert posted(store, hook(desk), 1).sent == 1
    assert desk.ids == ["n1", "n1"]


def test_a_redirect_is_not_followed(store: Path, desk: Desk):
    put(store, "n1")
    desk.answer = lambda number: 307
    told = posted(store, hook(desk))
    assert told.trouble == "answers 307: it has moved; write the address where it is now"
    assert desk.paths == ["/alerts"]


def test_one_notice_that_is_refused_does_not_hold_up_the_others(store: Path, desk: Desk):
    put(store, "n1", "n2")
    desk.answer = lambda number: 400 if number == 1 else 204
    told = posted(store, hook(desk))
    assert (told.sent, told.waiting, told.trouble) == (1, 1, "answers 400 Bad Request")
    assert states(store) == {"n1": "waiting", "n2": "sent"}


def test_what_never_arrives_is_given_up_after_a_week_and_told(store: Path, desk: Desk):
    put(store, "n1")
    desk.answer = lambda number: 503
    hours, tries = 0.0, 0
    while states(store) == {"n1": "waiting"}:
        told, hours = posted(store, hook(desk), hours), hours + 1
        tries = len(desk.requests)
    assert hours - 1 > GIVE_UP / HOUR >= hours - 8
    assert told.given_up == ("n1 happened",)
    assert 7 * 24 / 6 <= tries <= 8 + 7 * 24 / 2  # a try each four hours, give or take a half
    assert posted(store, hook(desk), hours + 100).given_up == ("n1 happened",)
    assert len(desk.requests) == tries


def test_pauses_double_from_a_minute_to_four_hours_and_are_spread():
    for tries in range(60):
        plain = min(MINUTE * 2 ** min(tries, 10), timedelta(hours=4))
        found = [pause(f"n{number}", tries) / plain for number in range(50)]
        assert 0.5 <= min(found) < 0.7
        assert 1.3 < max(found) <= 1.5
    assert pause("n", 5000) <= 1.5 * LONGEST_PAUSE


def test_what_is_urgent_is_tried_again_at_least_each_half_hour_however_long_a_target_is_away(
    store: Path, desk: Desk
):
    put(store, "old")
    desk.answer = lambda number: 503
    for hour in range(12):
        posted(store, hook(desk), hour)
    put(store, "urgent", made=NOW + 12 * HOUR, urgent=True, priority="high")
    times = []
    for minute in range(0, 360, 5):
        before = desk.ids.count("urgent")
        posted(store, hook(desk), 12 + minute / 60)
        times += [minute] * (desk.ids.count("urgent") - before)
    assert times[0] == 0
    gaps = [late - early for early, late in pairwise(times)]
    # ten minutes and half as much again, ten more where another one has just failed, seen each five minutes
    assert max(gaps) <= 30
    desk.answer = lambda number: 204
    assert posted(store, hook(desk), 18.5).sent >= 1
    assert desk.ids.count("urgent") == len(times) + 1


def test_what_quiet_hours_hold_goes_out_at_their_end(store: Path, desk: Desk):
    put(store, "n1", made=NOW + 6 * HOUR)  # the same as made earlier and held until then
    assert (posted(store, hook(desk), 5.99).sent, posted(store, hook(desk), 6).sent) == (0, 1)


def test_an_hour_with_too_many_ends_in_a_digest(store: Path, desk: Desk):
    names = [f"n{number:02d}" for number in range(20)]
    put(store, *names)
    assert posted(store, hook(desk, per_hour=5)).sent == 4  # the fifth place is kept for what is urgent
    assert desk.ids[:3] == names[:3]
    together = json.loads(desk.requests[-1][1])
    assert together["type"] == "outlet.alert.digest"
    assert all(f"{name} happened" in together["data"]["text"] for name in names[3:])
    put(store, "late", made=NOW + 0.5 * HOUR)
    assert posted(store, hook(desk, per_hour=5), 0.5).waiting == 1
    put(store, "urgent", made=NOW + 0.5 * HOUR, urgent=True, priority="high")
    assert posted(store, hook(desk, per_hour=5), 0.5).sent == 1
    assert desk.ids[-1] == "urgent"
    assert posted(store, hook(desk, per_hour=5), 1.1).sent == 1
    assert desk.ids[-1] == "late"


def test_targets_of_one_name_of_two_units_are_two(store: Path, desk: Desk):
    other = unit_with(hook(desk), key="other")
    put(store, "n1")
    put(store, "n2", target=address_of(other, HOOK))
    told = post([unit_with(hook(desk)), other], store, NOW)
    assert [(one.unit, one.sent) for one in told] == [("made", 1), ("other", 1)]


def test_what_waits_for_a_target_that_is_gone_is_told_and_given_up_after_a_week(store: Path, desk: Desk):
    put(store, "n1", target="made/office")
    for hours, left in ((0, 1), (7 * 24 - 1, 1), (7 * 24 + 1, 0)):
        there, gone = post([unit_with(hook(desk))], store, NOW + hours * HOUR)
        assert (there.target, there.waiting, there.trouble) == ("desk", 0, "")
        assert (gone.target, gone.waiting) == ("office", left)
        assert gone.trouble == "the unit file no longer names this target"
    assert gone.given_up == ("n1 happened",)
    assert len(post([unit_with(hook(desk))], store, NOW + 200 * HOUR)) == 1
    assert desk.requests == []


def _post_all(store: Path, url: str) -> int:
    [one] = post([unit_with(replace(HOOK, url=url, per_hour=1000))], store, NOW)
    return one.sent


def test_programs_that_send_at_the_same_time_share_the_work(store: Path, desk: Desk):
    names = [f"n{number:02d}" for number in range(24)]
    put(store, *names)
    with ThreadPoolExecutor(4) as pool:  # each with connections of its own, as programs have
        sent = list(pool.map(_post_all, [store] * 4, [desk.url] * 4))
    assert sum(sent) == 24
    assert sorted(desk.ids) == names


def run_and_die(code: str, *words: str | Path) -> int:
    """Run Python in a process that ends by SIGKILL."""
    script = f"import sys\nfrom pathlib import Path\nfrom tests.notices_made import *\n{code}"
    done = subprocess.run([sys.executable, "-c", script, *map(str, words)], cwd=ROOT, check=False)
    return done.returncode


def test_a_program_killed_while_it_sends_sends_again_under_the_same_id(store: Path, desk: Desk):
    put(store, "n1")
    killed = []

    def kill_first(number: int) -> int:
        if number == 1:
            killed.append(1)
            os.kill(child.pid, signal.SIGKILL)
        return 204

    desk.answer = kill_first
    script = (
        "import sys; from pathlib import Path; from tests.test_posting import _post_all\n"
        "sys.stdin.readline(); _post_all(Path(sys.argv[1]), sys.argv[2])\n"
    )
    child = subprocess.Popen(
        [sys.executable, "-c", script, str(store), desk.url], cwd=ROOT, stdin=subprocess.PIPE, text=True
    )
    child.communicate("go\n")
    assert (child.returncode, killed) == (-signal.SIGKILL, [1])
    assert states(store) == {"n1": "waiting"}
    assert posted(store, hook(desk)).sent == 0  # it may still be on its way
    assert posted(store, hook(desk), 0.1).sent == 1
    assert desk.ids == ["n1", "n1"]


DIE_AT = """
import sqlite3
from ingest import outbox
from tests.store_made import die
real = outbox.{step}
def step(*words, **more):
    {before}
    real(*words, **more)
    {after}
outbox.{step} = step
unit = unit_with(replace(HOOK, url=sys.argv[3]))
passed(Path(sys.argv[1]), unit, [Path(sys.argv[2])])
from monitor.posting import post
post([unit], Path(sys.argv[1]), datetime.now(UTC))
"""


@pytest.mark.parametrize(
    ("at", "kept"),
    [
        (("put", "die()", "pass"), 0),  # the alert is written in the transaction, the notice not yet
        (("put", "pass", "die()"), 0),  # both are written, the transaction not committed
        (("claim", "die()", "pass"), 1),  # the pass is committed, nothing is sent
        (("claim", "pass", "die()"), 1),
        (("arrived", "die()", "pass"), 1),  # it has arrived, and nobody has written that down
    ],
    ids=["before the notice", "before the commit", "before the claim", "in the claim", "after it arrived"],
)
def test_a_kill_anywhere_between_raise_and_notice_loses_nothing_and_makes_no_second_id(
    tmp_path: Path, desk: Desk, at: tuple[str, str, str], kept: int
):
    store, file = tmp_path / "store", export(tmp_path, "first.csv", (30, 56))
    code = DIE_AT.format(**dict(zip(("step", "before", "after"), at, strict=True)))
    assert run_and_die(code, store, file, desk.url) == -signal.SIGKILL
    # An alert and its notice are there together or not at all.
    assert len(documents.revisions(store, "made", KIND)) == len(waiting(store)) == kept
    first = set(desk.ids)
    assert len(desk.requests) == (at[0] == "arrived")
    unit = unit_with(hook(desk))
    passed(store, unit, [file])
    post([unit], store, datetime.now(UTC) + HOUR)
    [notice] = waiting(store)
    assert notice.state == "sent"
    assert set(desk.ids) == {notice.id} >= first


def unit_file(folder: Path, desk: Desk, more: str = "") -> Path:
    path = folder / "demo.toml"
    path.write_text(
        f'{DEMO}\n[[notify]]\nname = "desk"\nkind = "webhook"\nurl = "{desk.url}"\n{more}', encoding="utf-8"
    )
    return path


def outlet(*words: str | Path) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [sys.executable, "-m", "monitor", *map(str, words)],
        cwd=ROOT,
        capture_output=True,
        text=True,
        check=False,
    )


def test_the_command_sends_what_is_due_and_tells_what_waits(tmp_path: Path, store: Path, desk: Desk):
    put(store, "n1", target="demo/desk", made=datetime.now(UTC))
    file = unit_file(tmp_path, desk, 'secret_env = "MADE_SECRET"\n')
    words = ("notify", "--unit", file, "--store", store)
    desk.answer = lambda number: 500 if number == 1 else 204
    done = outlet(*words)
    assert (done.returncode, done.stdout) == (2, "demo/desk: 0 sent, 1 waiting\n")
    assert done.stderr.startswith(
        "demo/desk: notices do not arrive: answers 500 Internal Server Error\n  Put"
    )
    done = outlet(*words, "--json")
    # it is at rest now, which is told with the reason
    assert json.loads(done.stdout)["targets"][0]["trouble"] == "answers 500 Internal Server Error"
    assert len(desk.requests) == 1
    assert 'keyid="desk"' in desk.requests[0][0]["signature-input"]
    assert SECRET not in f"{done.stdout}{done.stderr}{desk.requests}"
    assert SECRET.encode() not in everything_written(tmp_path)


def test_a_run_sends_what_is_due_and_is_no_failure_if_that_does_not_arrive(
    tmp_path: Path, store: Path, desk: Desk
):
    put(store, "n1", target="demo/desk", made=datetime.now(UTC))
    (tmp_path / "in").mkdir()
    desk.answer = lambda number: 503
    done = outlet("run", "--unit", unit_file(tmp_path, desk), "--store", store, tmp_path / "in")
    assert done.returncode == 0
    assert "demo/desk: notices do not arrive: answers 503 Service Unavailable" in done.stderr
    assert desk.ids == ["n1"]


def test_the_command_tries_a_target_and_says_which_there_are(tmp_path: Path, desk: Desk):
    file = unit_file(tmp_path, desk)
    done = outlet("notify", "--unit", file, "--test", "desk")
    assert (done.returncode, done.stdout) == (0, "desk: the test has arrived\n")
    assert json.loads(desk.requests[0][1])["type"] == "outlet.alert.test"
    done = outlet("notify", "--unit", file, "--test", "office")
    assert (done.returncode, done.stderr) == (2, "no target is called 'office'\n  Name one of desk.\n")


def test_a_test_that_does_not_arrive_is_told_and_not_kept(store: Path, desk: Desk):
    desk.answer = lambda number: 404
    assert post_trial([unit_with(hook(desk))], "desk", NOW) == ("made/desk: answers 404 Not Found",)
    assert waiting(store) == ()


def test_whoever_follows_sends_what_is_due_and_tells_trouble_once(tmp_path: Path, store: Path, desk: Desk):
    told: list[str] = []
    put(store, "n1", target="demo/desk", made=datetime.now(UTC))
    (tmp_path / "in").mkdir()
    follower = Follower(
        [unit_file(tmp_path, desk)],
        store,
        [tmp_path / "in"],
        settle=timedelta(seconds=9),
        tell=lambda result, zone: None,
        warn=told.append,
    )
    desk.answer = lambda number: 500 if number == 1 else 204
    follower.look(0.0)
    follower.look(1.0)
    assert desk.ids == ["n1"]
    assert len(told) == 1
    put(store, "n2", target="demo/desk", made=datetime.now(UTC))
    follower.look(2.0)
    assert desk.ids == ["n1", "n2"]
