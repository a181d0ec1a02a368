"""What is said: short plain text and the same as a JSON document, safe wherever it is shown.

Names and causes come from site files, historians and other programs. Before anything is sent, every
text loses its line breaks, control characters and signs that turn the direction of writing: none
can start a header line, or look like another message.
"""

from __future__ import annotations

import datetime as dt
import json
import math
import unicodedata
import uuid
import zoneinfo
from dataclasses import dataclass
from typing import TYPE_CHECKING

from monitor.judging import tags_behind

if TYPE_CHECKING:
    from collections.abc import Mapping

    from monitor.site.load import Site
    from monitor.site.notify import Notify
    from monitor.store.alarms import AlarmRecord

__all__ = ["Message", "alarm_message", "identity", "job_message", "plain", "trial_message"]

VERSION = 1
"""Of the JSON document: grows when a key changes its meaning or goes."""
_CAUTION = "A monitoring aid, not a protection system."
_LONGEST = 500
_SHOWN_TAGS = 8
_NAMESPACE = uuid.UUID("3ab5a8e2-6d2c-4a43-9a3f-6c6f73747772")
_TITLES = {
    "raised": "Alarm raised",
    "returned": "Alarm returned to normal",
    "withdrawn": "Alarm withdrawn",
    "failed": "Job failed",
    "recovered": "Job works again",
    "test": "Test",
}


@dataclass(frozen=True)
class Message:
    """One notification, ready to be sent.

    Attributes:
        document: what a program receives; holds ``id``, ``title`` and ``text`` too. The id is the
            same however often the message is sent.
    """

    document: Mapping[str, object]

    @property
    def id(self) -> str:
        """Tells this message from all others."""
        return str(self.document["id"])

    @property
    def title(self) -> str:
        """One line."""
        return str(self.document["title"])

    @property
    def text(self) -> str:
        """A few lines of plain text."""
        return str(self.document["text"])

    def as_json(self) -> str:
        """The document as JSON: ASCII only, no NaN."""
        return json.dumps(self.document, allow_nan=False)

    @classmethod
    def read(cls, content: str) -> Message:
        """What `as_json` wrote."""
        return cls(json.loads(content))


def identity(site: str, target: str, key: str) -> str:
    """The id of a message: always the same for one event of a site told to one target."""
    return str(uuid.uuid5(_NAMESPACE, f"{site}\n{target}\n{key}"))


def plain(text: str, longest: int = _LONGEST) -> str:
    """Make one line of a text: without control characters, line breaks, or turned writing."""
    kept = "".join(
        " " if unicodedata.category(c) in {"Cc", "Cf", "Cs", "Co", "Cn", "Zl", "Zp"} else c
        for c in text
    )
    line = " ".join(kept.split())
    return line if len(line) <= longest else line[: longest - 1] + "…"


def alarm_message(
    site: Site, notify: Notify, alarm: AlarmRecord, event: str, time: int, key: str
) -> Message:
    """Say that an alarm was raised, has returned to normal, or was withdrawn.

    Args:
        site: the site.
        notify: who is told.
        alarm: as it stands.
        event: ``raised``, ``returned`` or ``withdrawn``.
        time: when, integer UTC seconds of plant time.
        key: of the outbox.
    """
    item = site.items.get(alarm.subject)
    name = item.name if item else alarm.subject
    tags = sorted(tags_behind(site).get(alarm.subject, ()))
    cost = _finite(alarm.cost_per_day)
    currency = site.file.economics.currency
    page = _page(notify, alarm.subject if item else "")
    lines = [
        ("What", plain(alarm.message)),
        ("Where", f"{name} ({alarm.subject}), {alarm.figure}"),
        ("Raised", _local(site, alarm.raised)),
        ("Returned" if event == "returned" else "", _local(site, time)),
        ("Priority", alarm.priority),
        ("Cost", f"about {cost:,.0f} {currency} a day".replace(",", " ") if cost else ""),
        ("Rests on", _listed(tags)),
        ("Page", page),
    ]
    if event == "withdrawn":
        lines.insert(0, ("Note", "judged again with later or corrected readings, it is no alarm"))
    return _message(
        site, notify, key, event, time, f"{alarm.priority}: {name}, {alarm.figure}", lines,
        {
            "subject": plain(alarm.subject), "subject_name": plain(name),
            "figure": plain(alarm.figure), "kind": plain(alarm.kind),
            "priority": plain(alarm.priority), "state": plain(alarm.state),
            "alarm": alarm.alarm_id, "raised": _utc(alarm.raised),
            "returned": _utc(time) if event == "returned" else None,
            "message": plain(alarm.message), "value": _finite(alarm.value),
            "unit": plain(alarm.unit), "cost_per_day": cost, "currency": plain(currency),
            "rests_on": [plain(tag) for tag in tags], "page": page or None,
        },
    )  # fmt: skip


def job_message(
    site: Site, notify: Notify, job: str, event: str, time: int, cause: str, key: str
) -> Message:
    """Say that a job of the daemon has failed, or works again.

    Args:
        site: the site.
        notify: who is told.
        job: its name.
        event: ``failed`` or ``recovered``.
        time: when, integer UTC seconds.
        cause: of the failure, empty when it works again.
        key: of the outbox.
    """
    effect = "the daemon tries again by itself and catches up when the cause is gone"
    lines = [
        ("What", f"{job} {'failed' if event == 'failed' else 'works again'}"),
        ("Cause", plain(cause)),
        ("Since", _local(site, time)),
        ("Note", effect if event == "failed" else ""),
    ]
    return _message(
        site, notify, key, event, time, job, lines,
        {"job": plain(job), "cause": plain(cause) or None, "since": _utc(time)},
    )  # fmt: skip


def trial_message(site: Site, notify: Notify, time: int) -> Message:
    """Say that the way from here to a target works; every one is a message of its own."""
    lines = [
        ("What", f"a test of [[notify]] '{notify.id}'; nothing has happened"),
        ("Sent", _local(site, time)),
    ]
    return _message(
        site, notify, f"test/{uuid.uuid4()}", "test", time, f"of '{notify.id}'", lines, {}
    )


def _message(
    site: Site,
    notify: Notify,
    key: str,
    event: str,
    time: int,
    about: str,
    lines: list[tuple[str, str]],
    details: dict[str, object],
) -> Message:
    title = plain(f"[{site.id}] {_TITLES[event]}: {about}", 150)
    said = [f"{_TITLES[event]} at {plain(site.file.site.name)}", ""]
    said += [f"{head}: {plain(text)}" for head, text in lines if head and text]
    said += ["", _CAUTION]
    return Message(
        {
            "version": VERSION,
            "id": identity(site.id, notify.id, key),
            "site": site.id,
            "site_name": plain(site.file.site.name),
            "event": event,
            "time": _utc(time),
            "title": title,
            "text": "\n".join(said),
            **details,
        }
    )


def _page(notify: Notify, equipment: str) -> str:
    if not notify.pages_url:
        return ""
    from dashboards.files import OVERVIEW_FILE, equipment_file  # noqa: PLC0415 - plotly: a second

    file = equipment_file(equipment) if equipment else OVERVIEW_FILE
    return f"{notify.pages_url.rstrip('/')}/{file}"


def _listed(tags: list[str]) -> str:
    more = len(tags) - _SHOWN_TAGS
    return ", ".join(tags[:_SHOWN_TAGS]) + (f" and {more} more" if more > 0 else "")


def _finite(value: float | None) -> float | None:
    return value if value is not None and math.isfinite(value) else None


def _local(site: Site, time: int) -> str:
    zone = zoneinfo.ZoneInfo(site.file.site.time_zone)
    return dt.datetime.fromtimestamp(time, tz=zone).isoformat(sep=" ", timespec="minutes")


def _utc(time: int) -> str:
    return dt.datetime.fromtimestamp(time, tz=dt.UTC).strftime("%Y-%m-%dT%H:%M:%SZ")
