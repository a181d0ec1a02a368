"""What every way of sending does, and a sender for each [[notify]] table."""

from __future__ import annotations

import contextlib
import socket
import ssl
import threading
from typing import TYPE_CHECKING, Protocol

from monitor.notify.errors import NotifyError
from monitor.notify.message import plain

if TYPE_CHECKING:
    from collections.abc import Iterator
    from pathlib import Path

    from monitor.notify.message import Message
    from monitor.site.load import Site
    from monitor.site.notify import Notify

__all__ = ["Sender", "connection_trouble", "deadline", "make_senders", "tls_context"]


class Sender(Protocol):
    """Hands messages over in one way, to one target."""

    def send(self, message: Message, now: int) -> str:
        """Hand a message over.

        Args:
            message: what is said.
            now: integer UTC seconds.

        Returns:
            What is to be noted although it was handed over; empty as a rule.

        Raises:
            NotifyError: it was not handed over.
        """


def make_senders(site: Site) -> dict[str, Sender]:
    """A sender for each [[notify]] table, by its id; nothing is opened yet."""
    return {notify.id: _sender(notify, site.folder) for notify in site.file.notify}


def _sender(notify: Notify, folder: Path) -> Sender:
    # Imported late: most sites use one of them.
    if notify.kind == "email":
        from monitor.notify.mail import Mail  # noqa: PLC0415

        return Mail(notify, folder)
    if notify.kind == "webhook":
        from monitor.notify.webhook import Webhook  # noqa: PLC0415

        return Webhook(notify, folder)
    from monitor.notify.command import Command  # noqa: PLC0415

    return Command(notify, folder)


def tls_context(notify: Notify, folder: Path) -> ssl.SSLContext:
    """What a TLS server is checked against: the system's authorities, or those of ``ca_file``.

    Raises:
        NotifyError: the file cannot be read, or holds no certificates.
    """
    if not notify.ca_file:
        return ssl.create_default_context()
    path = folder / notify.ca_file
    try:
        return ssl.create_default_context(cafile=path)
    except OSError as error:
        raise NotifyError(
            f"[[notify]] '{notify.id}', ca_file: {path} cannot be used "
            f"({error.strerror or error}); name a file of certificates in PEM form"
        ) from error


def connection_trouble(error: Exception, notify: Notify) -> str:
    """Say why a server could not be used, and what to do where that is known."""
    if isinstance(error, ssl.SSLCertVerificationError):
        return (
            f"its certificate is not trusted ({plain(error.verify_message, 200)}); name your "
            "authority's certificates in ca_file"
        )
    # The mail library puts an error of its own around it.
    if isinstance(error, TimeoutError) or isinstance(error.__context__, TimeoutError):
        return f"no answer within {notify.timeout:g} s"
    return f"cannot be used ({plain(str(error), 200) or type(error).__name__})"


@contextlib.contextmanager
def deadline(connection: socket.socket | None, seconds: float) -> Iterator[None]:
    """Cut a connection after a time, however busy it is.

    A socket's own time-out starts anew with every byte that comes; a server that sends one now and
    then would hold its caller for ever.

    Raises:
        TimeoutError: in place of whatever error the cut led to.
    """
    passed = threading.Event()

    def cut() -> None:
        passed.set()
        # It may have been closed in the meantime, which is what is wanted.
        with contextlib.suppress(OSError):
            if connection is not None:
                # Not a TLS socket's own method: that would wait for the one that reads.
                socket.socket.shutdown(connection, socket.SHUT_RDWR)

    timer = threading.Timer(seconds, cut)
    timer.daemon = True
    timer.start()
    try:
        yield
    except Exception as error:
        if passed.is_set():
            raise TimeoutError(f"cut after {seconds:g} s") from error
        raise
    finally:
        timer.cancel()
