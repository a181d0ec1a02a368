"""Messages as signed JSON to a web server: config/README.md says how a receiver verifies them."""

from __future__ import annotations

import hashlib
import hmac
import http.client
from dataclasses import dataclass
from typing import TYPE_CHECKING
from urllib.parse import SplitResult, urlsplit

from monitor.notify.errors import NotifyError
from monitor.notify.sender import connection_trouble, deadline, tls_context
from monitor.version import version

if TYPE_CHECKING:
    from pathlib import Path

    from monitor.notify.message import Message
    from monitor.site.notify import Notify

__all__ = ["Webhook", "signature"]

_DONE = range(200, 300)
_REFUSED = frozenset({400, 405, 406, 411, 413, 414, 415, 422})
"""Answers that say that this message is wrong, and would be wrong again."""


def signature(secret: str, timestamp: str, body: bytes) -> str:
    """HMAC-SHA256 (RFC 2104, FIPS 180-4) of ``timestamp + "." + body``, in hexadecimal."""
    content = timestamp.encode() + b"." + body
    return hmac.new(secret.encode(), content, hashlib.sha256).hexdigest()


@dataclass(frozen=True)
class Webhook:
    """Posts to one address.

    Attributes:
        notify: the table.
        folder: where a relative ``ca_file`` is taken from.
    """

    notify: Notify
    folder: Path

    def send(self, message: Message, now: int) -> str:
        """Post a message; see `Sender.send`."""
        url = urlsplit(self.notify.url.get_secret_value())
        body, timestamp = message.as_json().encode(), str(now)
        headers = {
            "Content-Type": "application/json",
            "User-Agent": f"lostwork/{version()}",
            "Lostwork-Id": message.id,
            "Lostwork-Timestamp": timestamp,
            "Lostwork-Signature": "sha256="
            + signature(self.notify.secret.get_secret_value(), timestamp, body),
            "Connection": "close",
        }
        path = (url.path or "/") + (f"?{url.query}" if url.query else "")
        connection = self._connection(url)
        try:
            connection.connect()
            with deadline(connection.sock, self.notify.timeout):
                connection.request("POST", path, body, headers)
                # Not followed: a redirect would take the message to an address nobody wrote down.
                status = connection.getresponse().status
        except (OSError, http.client.HTTPException) as error:
            raise NotifyError(
                f"{self._where(url)}: {connection_trouble(error, self.notify)}"
            ) from None
        finally:
            connection.close()
        if status in _DONE:
            return ""
        raise NotifyError(
            f"{self._where(url)}: answered {status}; {_advice(status)}", refused=status in _REFUSED
        )

    def _connection(self, url: SplitResult) -> http.client.HTTPConnection:
        host, port, wait = url.hostname or "", url.port, self.notify.timeout
        if url.scheme == "http":
            return http.client.HTTPConnection(host, port, timeout=wait)
        context = tls_context(self.notify, self.folder)
        return http.client.HTTPSConnection(host, port, timeout=wait, context=context)

    def _where(self, url: SplitResult) -> str:
        # Without the path: some services put a secret there.
        return f"[[notify]] '{self.notify.id}', {url.scheme}://{url.netloc}"


def _advice(status: int) -> str:
    if status in {401, 403}:
        return "check the secret, and the clocks of both machines"
    if status in range(300, 400):
        return "a redirect is not followed: write the final address into 'url'"
    return "look into the receiver's log"
