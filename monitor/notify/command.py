"""Messages to a program of the site's own: the JSON document on its standard input."""

from __future__ import annotations

import os
import signal
import subprocess
import tempfile
from dataclasses import dataclass
from typing import IO, TYPE_CHECKING

from monitor.notify.errors import NotifyError
from monitor.notify.message import plain

if TYPE_CHECKING:
    from pathlib import Path

    from monitor.notify.message import Message
    from monitor.site.notify import Notify

__all__ = ["Command"]

_PASSED_ON = frozenset(
    {"PATH", "HOME", "USER", "LANG", "LC_ALL", "LC_CTYPE", "TZ", "TMPDIR", "TEMP", "TMP",
     "SYSTEMROOT", "COMSPEC", "PATHEXT", "USERPROFILE"}
)  # fmt: skip
"""Of the environment: the rest may hold passwords of the store and the historian."""
_SHOWN = 300


@dataclass(frozen=True)
class Command:
    """Starts one program, never through a shell.

    Attributes:
        notify: the table.
        folder: the site file's; the program starts there.
    """

    notify: Notify
    folder: Path

    def send(self, message: Message, now: int) -> str:  # noqa: ARG002 - see Sender
        """Run the program and wait for its end; see `Sender.send`."""
        # A file, not a pipe: what the program leaves behind could keep a pipe open for ever.
        with tempfile.TemporaryFile() as said:
            code = self._run(message.as_json().encode() + b"\n", said)
            if code != 0:
                last = _last_words(said)
                raise NotifyError(f"{self._where}: exit code {code}{f': {last}' if last else ''}")
        return ""

    @property
    def _where(self) -> str:
        # Without the other arguments, which may hold what is nobody's business.
        return f"[[notify]] '{self.notify.id}', command {plain(self.notify.command[0], 100)}"

    def _run(self, content: bytes, said: IO[bytes]) -> int:
        try:
            process = subprocess.Popen(  # noqa: S603 - the site file's own words, and no shell
                self.notify.command,
                stdin=subprocess.PIPE,
                stdout=subprocess.DEVNULL,
                stderr=said,
                cwd=self.folder,
                env=self._environment(),
                # A group of its own, so that a time-out ends its children too.
                start_new_session=True,
            )
        except (OSError, ValueError) as error:
            reason = getattr(error, "strerror", None) or error
            raise NotifyError(f"{self._where}: cannot be started ({reason})") from error
        try:
            process.communicate(content, timeout=self.notify.timeout)
        except subprocess.TimeoutExpired:
            raise NotifyError(
                f"{self._where}: had not ended after {self.notify.timeout:g} s and was stopped"
            ) from None
        finally:
            if process.returncode is None:
                _stop(process)
        return process.returncode

    def _environment(self) -> dict[str, str]:
        wanted = {*_PASSED_ON, *self.notify.environment}
        return {k: v for k, v in os.environ.items() if k in wanted or k.upper() in _PASSED_ON}


def _stop(process: subprocess.Popen[bytes]) -> None:
    if os.name == "nt":
        process.kill()
    else:
        os.killpg(process.pid, signal.SIGKILL)
    process.wait()
    if process.stdin is not None:
        process.stdin.close()


def _last_words(said: IO[bytes]) -> str:
    said.seek(0, os.SEEK_END)
    said.seek(max(0, said.tell() - _SHOWN))
    return plain(said.read().decode("utf-8", "replace"), _SHOWN)
