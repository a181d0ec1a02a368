"""Messages as e-mail: SMTP, by default with TLS, with a login where the server wants one."""

from __future__ import annotations

import contextlib
import smtplib
from dataclasses import dataclass
from email.message import EmailMessage
from email.policy import SMTP
from email.utils import formatdate
from typing import TYPE_CHECKING, NoReturn

from monitor.notify.errors import NotifyError
from monitor.notify.message import plain
from monitor.notify.sender import connection_trouble, deadline, tls_context

if TYPE_CHECKING:
    from pathlib import Path

    from monitor.notify.message import Message
    from monitor.site.notify import Notify

__all__ = ["Mail"]

_PORTS = {"starttls": 587, "implicit": 465, "none": 25}
_PERMANENT = 500
"""A reply code from here on says that trying again is of no use (RFC 5321, section 4.2.1)."""


@dataclass(frozen=True)
class Mail:
    """Sends through one server, to a fixed list of people.

    Attributes:
        notify: the table.
        folder: where a relative ``ca_file`` is taken from.
    """

    notify: Notify
    folder: Path

    def send(self, message: Message, now: int) -> str:
        """Hand a message to the server; see `Sender.send`."""
        mail = self._mail(message, now)
        try:
            client = self._connected()
        except (OSError, smtplib.SMTPException, UnicodeError) as error:
            self._fail(error)
        try:
            with deadline(client.sock, self.notify.timeout):
                self._log_in(client)
                refused = client.send_message(mail)
                # Once it has taken the message, how it says goodbye must not send it again.
                with contextlib.suppress(OSError, smtplib.SMTPException):
                    client.quit()
        except (OSError, smtplib.SMTPException, UnicodeError) as error:
            self._fail(error)
        finally:
            client.close()
        return f"{self._where}: refused for {', '.join(sorted(refused))}" if refused else ""

    @property
    def _where(self) -> str:
        port = self.notify.port or _PORTS[self.notify.tls]
        return f"[[notify]] '{self.notify.id}', mail server {self.notify.host}:{port}"

    def _mail(self, message: Message, now: int) -> EmailMessage:
        mail = EmailMessage(policy=SMTP)
        mail["Subject"] = message.title
        mail["From"] = self.notify.from_
        mail["To"] = ", ".join(self.notify.to)
        mail["Date"] = formatdate(now)
        # The same however often it is sent, so that a mail program shows it once.
        mail["Message-ID"] = f"<{message.id}@lostwork.invalid>"
        # So that nobody's absence note answers (RFC 3834).
        mail["Auto-Submitted"] = "auto-generated"
        mail.set_content(message.text)
        return mail

    def _connected(self) -> smtplib.SMTP:
        notify = self.notify
        port = notify.port or _PORTS[notify.tls]
        if notify.tls == "implicit":
            context = tls_context(notify, self.folder)
            return smtplib.SMTP_SSL(notify.host, port, timeout=notify.timeout, context=context)
        return smtplib.SMTP(notify.host, port, timeout=notify.timeout)

    def _log_in(self, client: smtplib.SMTP) -> None:
        notify = self.notify
        if notify.tls == "starttls":
            # A server that offers no TLS is an error here, never a reason to go on without.
            client.starttls(context=tls_context(notify, self.folder))
        if not notify.user:
            return
        client.ehlo_or_helo_if_needed()
        if "PLAIN" in client.esmtp_features.get("auth", "").split():
            # Only this one: `login` would offer a wrong password once for every mechanism, and
            # some servers lock an account after a few.
            client.user, client.password = notify.user, notify.password.get_secret_value()
            client.auth("PLAIN", client.auth_plain)
        else:
            client.login(notify.user, notify.password.get_secret_value())

    def _fail(self, error: Exception) -> NoReturn:
        raise NotifyError(
            f"{self._where}: {self._reason(error)}", refused=_is_permanent(error)
        ) from None

    def _reason(self, error: Exception) -> str:
        if isinstance(error, smtplib.SMTPAuthenticationError):
            return f"the login was refused ({error.smtp_code}); check user and password"
        if isinstance(error, smtplib.SMTPRecipientsRefused):
            who = ", ".join(f"{to} ({code})" for to, (code, _) in error.recipients.items())
            return f"refused for {who}; check the addresses in 'to'"
        if isinstance(error, smtplib.SMTPNotSupportedError):
            return "it lacks what is asked of it (TLS, a login, or addresses beyond ASCII)"
        if isinstance(error, UnicodeError):
            return "a login or an address holds characters beyond ASCII"
        if isinstance(error, smtplib.SMTPResponseException):
            answer = error.smtp_error
            text = answer.decode("utf-8", "replace") if isinstance(answer, bytes) else str(answer)
            return f"answered {error.smtp_code} {self._without_password(plain(text, 200))}"
        return connection_trouble(error, self.notify)

    def _without_password(self, text: str) -> str:
        password = self.notify.password.get_secret_value()
        return text.replace(password, "***") if password else text


def _is_permanent(error: Exception) -> bool:
    if isinstance(error, smtplib.SMTPRecipientsRefused):
        return all(code >= _PERMANENT for code, _ in error.recipients.values())
    if isinstance(error, (smtplib.SMTPSenderRefused, smtplib.SMTPDataError)):
        return error.smtp_code >= _PERMANENT
    return False
