"""Which keys a kind of [[notify]] needs and takes, and what their values may look like.

Pure: `monitor.site.models` calls it when a site file is read. No sentence here repeats a value that
may hold a secret.
"""

from __future__ import annotations

import re
from typing import TYPE_CHECKING
from urllib.parse import urlsplit

if TYPE_CHECKING:
    from collections.abc import Iterator, Mapping

__all__ = [
    "DEFAULT_NOT_OLDER_THAN",
    "KEYS_OF_KIND",
    "_address_complaint",
    "complaints",
    "is_loopback",
    "url_complaint",
]

KEYS_OF_KIND = {
    "email": ("host", "from", "to", "tls", "port", "user", "password", "ca_file"),
    "webhook": ("url", "secret", "ca_file"),
    "command": ("command", "environment"),
}
"""The keys that belong to one kind alone; the others belong to all."""
DEFAULT_NOT_OLDER_THAN = 86400.0
"""[s]"""
_REQUIRED = {
    "email": ("host", "from", "to"),
    "webhook": ("url", "secret"),
    "command": ("command",),
}
_LEAST_SECRET = 16
"""[characters] A shorter secret could be guessed from one signed message."""
_ADDRESS = re.compile(r"[^@\s<>()\[\],;:\\\"]{1,64}@[^@\s<>()\[\],;:\\\"]{1,255}")
_HOST = re.compile(r"[A-Za-z0-9._:-]{1,255}")
_ENVIRONMENT = re.compile(r"[A-Za-z_][A-Za-z0-9_]*")
_LOOPBACK = frozenset({"localhost", "127.0.0.1", "::1"})


def complaints(kind: str, given: Mapping[str, object]) -> Iterator[str]:
    """Say what is wrong with a table.

    Args:
        kind: one of `KEYS_OF_KIND`.
        given: the keys that the site file states, with their values; secrets as plain text.
    """
    own = KEYS_OF_KIND[kind]
    for key in _REQUIRED[kind]:
        if not given.get(key):
            yield f"'{key}' is missing: kind \"{kind}\" needs {', '.join(_REQUIRED[kind])}"
    others = {key for keys in KEYS_OF_KIND.values() for key in keys} - set(own)
    for key in sorted(others & set(given)):
        yield f"'{key}' does not belong to kind \"{kind}\", which takes {', '.join(own)}"
    yield from _times(given)
    yield from {"email": _email, "webhook": _webhook, "command": _command}[kind](given)


def _times(given: Mapping[str, object]) -> Iterator[str]:
    quiet, oldest = given.get("quiet", 0.0), given.get("not_older_than", DEFAULT_NOT_OLDER_THAN)
    if isinstance(quiet, float) and isinstance(oldest, float) and quiet > oldest:
        yield "'quiet' is longer than 'not_older_than': what it holds back would be too old to send"


def _email(given: Mapping[str, object]) -> Iterator[str]:
    for key in ("from", "to"):
        yield from (found for found in map(_address_complaint, _texts(given.get(key))) if found)
    host = str(given.get("host") or "")
    if host and not _HOST.fullmatch(host):
        yield "'host' is no host name; write one such as \"mail.plant.example\""
    if bool(given.get("user")) != bool(given.get("password")):
        yield "a login needs both 'user' and 'password'; give the other one too, or neither"
    elif given.get("user") and given.get("tls") == "none":
        yield 'a password is not sent without TLS; write tls = "starttls" or "implicit"'
    if not str(given.get("user") or "").isprintable():
        yield "'user' holds a control character"


def _webhook(given: Mapping[str, object]) -> Iterator[str]:
    found = url_complaint(str(given.get("url") or ""))
    if given.get("url") and found:
        yield f"'url' {found}"
    secret = str(given.get("secret") or "")
    if secret and len(secret) < _LEAST_SECRET:
        yield f"'secret' is shorter than {_LEAST_SECRET} characters; make a long random one"


def _command(given: Mapping[str, object]) -> Iterator[str]:
    for argument in _texts(given.get("command")):
        if "\0" in argument:
            yield "'command' holds a zero character"
    for name in _texts(given.get("environment")):
        if not _ENVIRONMENT.fullmatch(name):
            yield "'environment' lists names of variables, such as \"SMS_TOKEN\", not values"


def _address_complaint(address: str) -> str:
    """What is wrong with an e-mail address, empty when nothing is."""
    if _ADDRESS.fullmatch(address) and address.isprintable():
        return ""
    return f'{address!r} is no e-mail address; write one such as "shift@plant.example"'


def url_complaint(url: str) -> str:
    """What is wrong with a webhook's address, empty when nothing is; never repeats the address."""
    try:
        parts = urlsplit(url)
        # Reading the port is what checks it.
        host, _ = parts.hostname or "", parts.port
    except ValueError:
        return 'is no URL; write one such as "https://messages.plant.example/lostwork"'
    if not url.isascii() or not url.isprintable() or " " in url or not host:
        return 'is no URL; write one such as "https://messages.plant.example/lostwork"'
    if parts.username is not None or parts.fragment:
        return "holds a user or a fragment; the signature is what tells the receiver who sends"
    if parts.scheme == "https" or (parts.scheme == "http" and is_loopback(host)):
        return ""
    return "must begin with https:// (http:// only to this machine itself)"


def is_loopback(host: str) -> bool:
    """Whether a host's name means this machine itself, so that nothing crosses a network."""
    return host in _LOOPBACK


def _texts(value: object) -> tuple[str, ...]:
    if isinstance(value, (list, tuple)):
        return tuple(str(v) for v in value)
    return (str(value),) if value else ()
