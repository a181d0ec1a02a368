"""E-mail, webhook and command against real receivers, which also misbehave."""

from __future__ import annotations

import email
import email.policy
import json
import re
import subprocess
import time
from pathlib import Path

import pytest
from notify_samples import NOW, PASSWORD, SECRET, alarm_of

from monitor.notify.errors import NotifyError
from monitor.notify.message import alarm_message, trial_message
from monitor.notify.sender import make_senders

README = (Path(__file__).parents[3] / "config" / "README.md").read_text(encoding="utf-8")


def send(told, message=None):
    """Send one message to the only target."""
    (sender,) = make_senders(told.site).values()
    (notify,) = told.site.file.notify
    return sender.send(message or trial_message(told.site, notify, NOW), NOW)


def alarm_text(told, **changes):
    (notify,) = told.site.file.notify
    return alarm_message(told.site, notify, alarm_of(NOW - 3600, **changes), "raised", NOW, "key")


def received(box):
    ((envelope, _),) = box.messages
    return email.message_from_bytes(envelope.content, policy=email.policy.SMTP)


@pytest.mark.parametrize("tls", ["starttls", "implicit"])
def test_a_mail_arrives_over_tls_after_a_login(told, mail_server, mail_table, tls):
    box = mail_server(tls)
    at = told(mail_table(box.port, f'tls = "{tls}"\npages_url = "https://plant.example/p/"\n'))
    message = alarm_text(at)
    assert send(at, message) == ""
    ((envelope, over_tls),) = box.messages
    assert over_tls
    assert [(login, word) for login, word, _ in box.logins] == [(b"lostwork", PASSWORD.encode())]
    assert all(secret for *_, secret in box.logins)
    assert envelope.rcpt_tos == ["shift@plant.example", "energy@plant.example"]
    mail = received(box)
    assert mail["From"] == "lostwork@plant.example"
    assert mail["Subject"] == "[mill_race] Alarm raised: medium: Turbine TG1, eta_s_1"
    assert message.id in mail["Message-ID"]
    assert mail["Auto-Submitted"] == "auto-generated"
    assert mail.get_content_type() == "text/plain"
    lines = mail.get_content().splitlines()
    assert "What: Turbine TG1: isentropic efficiency 79.0 %, expected 82.0 %" in lines[2]
    assert "Where: Turbine TG1 (TG1), eta_s_1" in lines
    assert "Cost: about 1 234 EUR a day" in lines
    assert "Rests on: FT-4101, JT-4101, PT-4103, PT-6201, TT-4103, TT-6201" in lines
    assert "Page: https://plant.example/p/equipment-TG1.html" in lines


def test_no_password_goes_to_a_server_without_tls(told, mail_server, mail_table):
    box = mail_server("none")
    with pytest.raises(NotifyError, match="lacks what is asked of it"):
        send(told(mail_table(box.port)))
    assert box.logins == []
    assert box.messages == []


def test_a_relay_without_tls_takes_mail_without_a_login(told, mail_server):
    box = mail_server("none")
    at = told(
        f'[[notify]]\nid = "r"\nkind = "email"\nhost = "127.0.0.1"\nport = {box.port}\n'
        'tls = "none"\nfrom = "a@b.example"\nto = ["c@d.example"]\n'
    )
    send(at)
    assert received(box)["To"] == "c@d.example"


@pytest.mark.parametrize("tls", ["starttls", "implicit"])
def test_a_server_with_an_unknown_certificate_gets_nothing(told, mail_server, mail_table, tls):
    box = mail_server(tls)
    table = re.sub("ca_file = .*", f'tls = "{tls}"', mail_table(box.port))
    with pytest.raises(NotifyError, match=r"certificate is not trusted .*ca_file"):
        send(told(table))
    assert (box.logins, box.messages) == ([], [])


def test_a_missing_ca_file_is_named(told, mail_table):
    at = told(re.sub("ca_file = .*", 'ca_file = "no.pem"', mail_table(9)))
    with pytest.raises(NotifyError, match="cannot be used"):
        send(at)
    at = told(re.sub("ca_file = .*", 'tls = "implicit"\nca_file = "no.pem"', mail_table(9)))
    with pytest.raises(NotifyError, match=r"no\.pem cannot be used"):
        send(at)


def test_a_wrong_password_is_named_without_showing_it(told, mail_server, mail_table):
    box = mail_server()
    box.password = "changed-since"  # noqa: S105 - made up
    with pytest.raises(NotifyError, match=r"the login was refused \(535\)") as caught:
        send(told(mail_table(box.port)))
    assert PASSWORD not in str(caught.value)
    assert not caught.value.refused
    assert caught.value.__cause__ is None


def test_a_refused_address_is_noted_and_the_others_get_their_mail(told, mail_server, mail_table):
    box = mail_server()
    box.refuse = {"energy@plant.example": "550 no such user"}
    assert "refused for energy@plant.example" in send(told(mail_table(box.port)))
    assert box.messages[0][0].rcpt_tos == ["shift@plant.example"]


@pytest.mark.parametrize(("code", "final"), [("550 no", True), ("450 later", False)])
def test_a_greylisted_mail_is_tried_again_and_a_refused_one_not(
    told, mail_server, mail_table, code, final
):
    box = mail_server()
    box.refuse = dict.fromkeys(("energy@plant.example", "shift@plant.example"), code)
    with pytest.raises(NotifyError, match="check the addresses") as caught:
        send(told(mail_table(box.port)))
    assert caught.value.refused is final


HOSTILE = "Turbine\r\nBcc: thief@evil.example\r\n\r\n<script>alert(1)</script>\u2028\u202egnp"


def test_a_name_with_line_breaks_starts_no_header_and_no_line(told, mail_server, mail_table):
    box = mail_server()
    at = told(mail_table(box.port))
    send(at, alarm_text(at, subject=HOSTILE, figure=HOSTILE, message=HOSTILE, priority=HOSTILE))
    mail = received(box)
    assert mail["Bcc"] is None
    assert "thief@evil.example" not in box.messages[0][0].rcpt_tos
    assert mail["Subject"].startswith("[mill_race] Alarm raised: Turbine Bcc: thief@evil")
    assert not any(line.startswith(("Bcc", "<script")) for line in mail.get_content().splitlines())
    assert "\u202e" not in mail.get_content()


@pytest.mark.parametrize(
    ("first", "again"),
    [(b"", b""), (b"220 plant.example ready\r\n", b"250-still thinking\r\n")],
    ids=["silent", "one line after another"],
)
def test_a_mail_server_that_never_comes_to_an_end_is_left(
    told, raw_server, mail_table, first, again
):
    port = raw_server(first, again)
    at = told(mail_table(port).replace('"5 s"', '"0.3 s"').replace("localhost", "127.0.0.1"))
    with pytest.raises(NotifyError, match=r"no answer within 0\.3 s"):
        send(at)


@pytest.mark.parametrize(
    ("first", "again"),
    [(b"", b""), (b"HTTP/1.1 2", b"0")],
    ids=["silent", "one byte after another"],
)
def test_a_web_server_that_never_comes_to_an_end_is_left(
    told, raw_server, hook_table, first, again
):
    table = hook_table(f"http://127.0.0.1:{raw_server(first, again)}/").replace("5 s", "0.3 s")
    with pytest.raises(NotifyError, match=r"no answer within 0\.3 s"):
        send(told(table))


def test_an_answer_counts_although_its_headers_never_end(told, raw_server, hook_table):
    port = raw_server(b"HTTP/1.1 200 OK\r\nX-A: ", b"a")
    assert send(told(hook_table(f"http://127.0.0.1:{port}/").replace("5 s", "0.3 s"))) == ""


def test_openssl_finds_the_same_signature(told, web_server, hook_table, tmp_path):
    web = web_server()
    at = told(hook_table(web.url))
    message = alarm_text(at)
    send(at, message)
    ((path, headers, body),) = web.requests
    assert path == "/hook?from=mill"
    assert headers["Lostwork-Timestamp"] == str(NOW)
    signed = tmp_path / "signed"
    signed.write_bytes(f"{NOW}.".encode() + body)
    found = subprocess.run(
        ["openssl", "dgst", "-sha256", "-hmac", SECRET, signed],  # noqa: S607
        check=True, capture_output=True, text=True, timeout=60,
    ).stdout.split()[-1]  # fmt: skip
    assert headers["Lostwork-Signature"] == f"sha256={found}"
    assert json.loads(body) == message.document
    assert headers["Lostwork-Id"] == json.loads(body)["id"] == message.id


def test_the_documented_receiver_tells_genuine_from_forged(
    told, web_server, hook_table, monkeypatch
):
    (code,) = re.findall(r"```python\n(def is_genuine.*?)```", README, re.DOTALL)
    names: dict = {}
    exec("import hashlib, hmac, time\n" + code, names)  # noqa: S102 - the manual's own example
    is_genuine = names["is_genuine"]
    web = web_server()
    send(told(hook_table(web.url)))
    ((_, headers, body),) = web.requests
    monkeypatch.setattr(time, "time", lambda: NOW + 10)
    assert is_genuine(headers, body, SECRET)
    assert not is_genuine(headers, body.replace(b"test", b"TEST"), SECRET)
    assert not is_genuine(headers, body, SECRET + "x")
    later = headers | {"Lostwork-Timestamp": str(NOW + 5)}
    assert not is_genuine(later, body, SECRET)
    monkeypatch.setattr(time, "time", lambda: NOW + 1000)
    assert not is_genuine(headers, body, SECRET)


def test_a_webhook_checks_the_certificate(told, web_server, hook_table, certificate):
    web = web_server(tls=True)
    with pytest.raises(NotifyError, match="certificate is not trusted"):
        send(told(hook_table(web.url)))
    assert web.requests == []
    send(told(hook_table(web.url, f'ca_file = "{certificate[0]}"\n')))
    assert len(web.requests) == 1


@pytest.mark.parametrize(
    ("status", "refused", "advice"),
    [(500, False, "log"), (401, False, "secret"), (422, True, "log"), (302, False, "redirect")],
)
def test_an_answer_other_than_2xx_is_no_delivery(
    told, web_server, hook_table, status, refused, advice
):
    web = web_server()
    web.answers = [status]
    with pytest.raises(NotifyError, match=f"answered {status}.*{advice}") as caught:
        send(told(hook_table(web.url)))
    assert caught.value.refused is refused
    # A redirect is not followed.
    assert [path for path, *_ in web.requests] == ["/hook?from=mill"]
    # Some services put a secret into the address.
    assert "hook?" not in str(caught.value)


ECHO = """
import json, os, sys
with open("seen.json", "w") as file:
    json.dump([sys.argv[1:], sys.stdin.read(), dict(os.environ), os.getcwd()], file)
"""


def test_a_command_gets_the_document_and_its_words_as_they_are(told, command_table, monkeypatch):
    monkeypatch.setenv("PAGER_TOKEN", "for the pager")
    words = ["$(touch hacked)", "; touch hacked", "a b"]
    at = told(command_table(ECHO, *words, more='environment = ["PAGER_TOKEN"]\n'))
    message = alarm_text(at)
    send(at, message)
    folder = at.site.folder
    arguments, given, environment, where = json.loads((folder / "seen.json").read_text())
    assert arguments == words
    assert json.loads(given) == message.document
    assert Path(where) == folder.resolve()
    assert not (folder / "hacked").exists()
    assert environment["PAGER_TOKEN"] == "for the pager"  # noqa: S105 - made up
    # What the daemon itself needs is nobody else's business.
    assert "LOSTWORK_TEST_PASSWORD" not in environment


def test_a_command_that_fails_is_told_with_its_last_words(told, command_table):
    at = told(command_table("import sys; sys.exit('no\\x1b[31m modem\\nfound')"))
    with pytest.raises(NotifyError, match=r"'pager', .*: exit code 1: no \[31m modem found"):
        send(at)


def test_a_command_that_is_not_there_is_named(told):
    at = told('[[notify]]\nid = "p"\nkind = "command"\ncommand = ["/no/such/program", "x"]\n')
    with pytest.raises(NotifyError, match="/no/such/program: cannot be started"):
        send(at)


HANGS = """
import subprocess, sys, pathlib
child = subprocess.Popen([sys.executable, "-c", "import time; time.sleep(60)"])
pathlib.Path("child").write_text(str(child.pid))
child.wait()
"""


@pytest.mark.skipif(not Path("/proc/self/stat").exists(), reason="looks at processes in /proc")
def test_a_command_that_hangs_is_stopped_with_its_children(told, command_table):
    at = told(command_table(HANGS, more='timeout = "1 s"\n'))
    with pytest.raises(NotifyError, match="had not ended after 1 s and was stopped"):
        send(at)
    child = Path("/proc") / (at.site.folder / "child").read_text()
    for _ in range(100):
        # Gone, or dead and not yet collected.
        if not child.exists() or (child / "stat").read_text().split()[2] == "Z":
            break
        time.sleep(0.01)
    else:
        pytest.fail("the child outlived the time-out")
