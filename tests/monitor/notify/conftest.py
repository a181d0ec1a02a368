"""Real receivers on loopback: a mail server with TLS and login, a web server, silent ones."""

# ruff: noqa: ARG002 - aiosmtpd hands over more than is looked at

from __future__ import annotations

import contextlib
import http.server
import socket
import ssl
import subprocess
import sys
import threading
from contextlib import ExitStack
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import pytest
from aiosmtpd.controller import Controller
from aiosmtpd.smtp import AuthResult
from notify_samples import HOUR, NOW, PASSWORD, SECRET, alarm_of, step

from monitor import log
from monitor.commands.opening import opened
from monitor.notify.deliver import deliver
from monitor.notify.outbox import Outbox
from monitor.notify.queue import queue_alarms
from monitor.notify.sender import make_senders

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator
    from pathlib import Path

    from monitor.commands.opening import Opened


@pytest.fixture(scope="session")
def certificate(tmp_path_factory):
    """A self-signed certificate for loopback, made by OpenSSL: (certificate, key)."""
    folder = tmp_path_factory.mktemp("certificate")
    made, key = folder / "server.pem", folder / "key.pem"
    subprocess.run(
        ["openssl", "req", "-x509", "-newkey", "rsa:2048", "-nodes", "-days", "2",  # noqa: S607
         "-keyout", key, "-out", made, "-subj", "/CN=localhost",
         "-addext", "subjectAltName=DNS:localhost,IP:127.0.0.1"],
        check=True, capture_output=True, timeout=60,
    )  # fmt: skip
    return made, key


@pytest.fixture(scope="session")
def server_tls(certificate):
    context = ssl.SSLContext(ssl.PROTOCOL_TLS_SERVER)
    context.load_cert_chain(*certificate)
    return context


def free_port():
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return probe.getsockname()[1]


@dataclass
class MailBox:
    """What a mail server received, and how it answers."""

    port: int
    password: str = PASSWORD
    messages: list[Any] = field(default_factory=list)
    logins: list[tuple[bytes, bytes, bool]] = field(default_factory=list)
    refuse: dict[str, str] = field(default_factory=dict)
    refuse_content: str = ""

    async def handle_RCPT(self, server, session, envelope, address, options):  # noqa: N802
        if address in self.refuse:
            return self.refuse[address]
        envelope.rcpt_tos.append(address)
        return "250 OK"

    async def handle_DATA(self, server, session, envelope):  # noqa: N802
        if self.refuse_content:
            return self.refuse_content
        self.messages.append((envelope, _is_secret(server)))
        return "250 taken"

    def authenticate(self, server, session, envelope, mechanism, given):
        good = (given.login, given.password) == (b"lostwork", self.password.encode())
        self.logins.append((given.login, given.password, _is_secret(server)))
        return AuthResult(success=good, handled=False)


def _is_secret(server):
    return server.transport.get_extra_info("cipher") is not None


@pytest.fixture
def mail_server(server_tls) -> Iterator[Callable[..., MailBox]]:
    """Start a mail server; ``tls`` as in the site file, with a login unless it is ``none``."""
    with ExitStack() as stack:

        def start(tls: str = "starttls", port: int | None = None) -> MailBox:
            box = MailBox(port or free_port())
            options: dict[str, Any] = {"authenticator": box.authenticate}
            if tls == "starttls":
                options |= {"tls_context": server_tls, "require_starttls": True,
                            "auth_required": True}  # fmt: skip
            elif tls == "implicit":
                options |= {"ssl_context": server_tls, "auth_require_tls": False,
                            "server_hostname": "localhost"}  # fmt: skip
            controller = Controller(box, hostname="127.0.0.1", port=box.port, **options)
            controller.start()
            stack.callback(controller.stop)
            return box

        yield start


@dataclass
class WebServer:
    """What a web server received, and how it answers: the listed statuses, then 200."""

    url: str
    port: int
    requests: list[tuple[str, dict[str, str], bytes]] = field(default_factory=list)
    answers: list[int] = field(default_factory=list)


@pytest.fixture
def web_server(server_tls) -> Iterator[Callable[..., WebServer]]:
    """Start a web server on loopback, with or without TLS."""
    with ExitStack() as stack:

        def start(port: int = 0, *, tls: bool = False) -> WebServer:
            class Handler(http.server.BaseHTTPRequestHandler):
                def do_POST(self):
                    body = self.rfile.read(int(self.headers["Content-Length"]))
                    web.requests.append((self.path, dict(self.headers), body))
                    status = web.answers.pop(0) if web.answers else 200
                    self.send_response(status)
                    if status in range(300, 400):
                        self.send_header("Location", "/elsewhere")
                    self.end_headers()

                def log_message(self, *_arguments):
                    pass

            server = http.server.ThreadingHTTPServer(("127.0.0.1", port), Handler)
            if tls:
                server.socket = server_tls.wrap_socket(server.socket, server_side=True)
            web = WebServer(
                f"http{'s' if tls else ''}://127.0.0.1:{server.server_port}/hook?from=mill",
                server.server_port,
            )
            thread = threading.Thread(target=server.serve_forever, kwargs={"poll_interval": 0.02})
            thread.start()
            stack.callback(thread.join)
            stack.callback(server.server_close)
            stack.callback(server.shutdown)
            return web

        yield start


@pytest.fixture
def raw_server() -> Iterator[Callable[..., int]]:
    """Start a server that says something, and then a little more for ever (or nothing)."""
    stop = threading.Event()
    with ExitStack() as stack:

        def start(first: bytes, again: bytes = b"") -> int:
            listener = socket.create_server(("127.0.0.1", 0))
            listener.settimeout(0.05)

            def serve() -> None:
                kept = []
                while not stop.is_set():
                    with contextlib.suppress(TimeoutError):
                        kept.append(listener.accept()[0])
                        kept[-1].sendall(first)
                    for connection in kept if again else []:
                        with contextlib.suppress(OSError):
                            connection.sendall(again)
                for connection in kept:
                    connection.close()

            thread = threading.Thread(target=serve)
            thread.start()
            stack.callback(listener.close)
            stack.callback(thread.join)
            stack.callback(stop.set)
            return listener.getsockname()[1]

        yield start


MAIL = """
[[notify]]
id = "office"
kind = "email"
host = "localhost"
port = {port}
from = "lostwork@plant.example"
to = ["shift@plant.example", "energy@plant.example"]
user = "lostwork"
password = "${{LOSTWORK_TEST_PASSWORD}}"
ca_file = "{ca}"
timeout = "5 s"
"""
HOOK = """
[[notify]]
id = "hook"
kind = "webhook"
url = "{url}"
secret = "${{LOSTWORK_TEST_SECRET}}"
timeout = "5 s"
"""
COMMAND = """
[[notify]]
id = "pager"
kind = "command"
command = {command}
"""


@dataclass
class Told:
    """A site with targets, its store, and a clock that the test sets."""

    at: Opened
    now: int = NOW

    @property
    def site(self):
        return self.at.site

    @property
    def store(self):
        return self.at.store

    @property
    def box(self):
        return Outbox(self.at.store)

    def __call__(self) -> float:
        return float(self.now)

    def senders(self):
        return make_senders(self.site)

    def deliver(self, senders=None):
        return deliver(self.store, self.site, self.now, senders or self.senders())

    def minute(self, senders=None):
        """What happens each minute."""
        queue_alarms(self.site, self.store, self.now)
        done = self.deliver(senders)
        self.now += 60
        return done

    def raise_alarm(self, raised: int = NOW - HOUR, **changes):
        alarm = alarm_of(raised, **changes)
        number = self.store.put_alarm(alarm)
        self.store.record_transition(number, step(raised, "raise", "normal", "unacknowledged"))
        return number

    def return_alarm(self, number: int, time: int):
        self.store.record_transition(number, step(time, "clear", "unacknowledged", "returned"))

    def states(self):
        return [(e.target, e.event, e.state) for e in self.box.entries()]


@pytest.fixture
def told(make_plant, tmp_path, monkeypatch) -> Iterator[Callable[..., Told]]:
    """Open a tiny plant's site with [[notify]] tables added to its file."""
    monkeypatch.setenv("LOSTWORK_TEST_PASSWORD", PASSWORD)
    monkeypatch.setenv("LOSTWORK_TEST_SECRET", SECRET)
    log.configure()
    with ExitStack() as stack:

        def open_site(*tables: str, store: str = "sqlite:///figures.sqlite") -> Told:
            plant = make_plant(tmp_path / "site", days=0.05, store=store)
            plant.path.write_text(plant.path.read_text() + "\n".join(tables))
            return Told(stack.enter_context(opened(plant.path)))

        yield open_site


@pytest.fixture
def mail_table(certificate):
    return lambda port, more="": MAIL.format(port=port, ca=certificate[0]) + more


@pytest.fixture
def hook_table():
    return lambda url, more="": HOOK.format(url=url) + more


@pytest.fixture
def command_table(tmp_path):
    """A table whose command is a Python program that the test writes."""

    def table(program: str, *arguments: str, more: str = "") -> str:
        path: Path = tmp_path / "program.py"
        path.write_text(program)
        words = [sys.executable, str(path), *arguments]
        return COMMAND.format(command=str([str(w) for w in words]).replace("'", '"')) + more

    return table
