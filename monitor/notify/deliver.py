"""Send what is due in the outbox: with growing waits, and no more often than it must be.

At least once: a try is written down before it is made, and its success after. Where the process
dies between the two, or the receiver's answer is lost, the message is sent again later, with the
same id, by which the receiver can drop the double. In every other case it is sent once.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any, Literal

from monitor.notify.errors import NotifyError
from monitor.notify.message import Message
from monitor.notify.outbox import Entry, Outbox

if TYPE_CHECKING:
    from collections.abc import Callable, Mapping, Sequence

    from monitor.notify.sender import Sender
    from monitor.site.load import Site
    from monitor.site.notify import Notify
    from monitor.store.site import SiteStore

__all__ = ["Delivery", "deliver", "wait_after"]

_LONGEST_WAIT = 6 * 3600.0
_AT_ONCE = 20
"""Messages to one target in one call; the rest follows with the next."""


@dataclass(frozen=True)
class Delivery:
    """How one try went.

    Attributes:
        target: id of the [[notify]] table.
        title: of the message.
        outcome: ``sent``; ``waiting`` when it will be tried again; ``failed`` when not.
        error: why not, or what is to be noted although it was sent; empty as a rule.
        fault: an error that no sender should give, to be told with its traceback.
    """

    target: str
    title: str
    outcome: Literal["sent", "waiting", "failed"]
    error: str = ""
    fault: Exception | None = None


def wait_after(notify: Notify, tries: int) -> float:
    """How long to wait after so many failed tries [s]: doubled each time, six hours at most."""
    return float(min(notify.retry_wait * 2.0 ** min(tries - 1, 60), _LONGEST_WAIT))


def deliver(
    store: SiteStore,
    site: Site,
    now: int,
    senders: Mapping[str, Sender],
    *,
    stop: Callable[[], bool] = lambda: False,
) -> tuple[Delivery, ...]:
    """Try what is due, target by target; one that does not work leaves the others alone.

    Args:
        store: the site's part of the store.
        site: the site.
        now: the wall clock, integer UTC seconds.
        senders: by the target's id, see `monitor.notify.sender.make_senders`.
        stop: asked before each message; true ends the call.

    Returns:
        Every try. What a sender could not do is in there, and in the outbox; it raises nothing.

    Raises:
        StoreError: the database refuses; nothing is sent that could not be written down before.
    """
    done: list[Delivery] = []
    for notify in site.file.notify:
        target = _Target(Outbox(store), notify, senders[notify.id], now)
        done += target.deliver(stop)
    return tuple(done)


@dataclass(frozen=True)
class _Target:
    """Delivery to one target."""

    box: Outbox
    notify: Notify
    sender: Sender
    now: int

    def deliver(self, stop: Callable[[], bool]) -> list[Delivery]:
        done, waiting = self._given_up(self.box.entries(self.notify.id, ("waiting",)))
        ready = self._out_of_quiet(waiting)
        # All of them wait for the same target: once one is due, they are tried in their order.
        if not any(entry.due <= self.now for entry in ready):
            return done
        for position, entry in enumerate(ready[:_AT_ONCE]):
            if stop():
                break
            begun = self._begin(entry)
            try:
                note = self.sender.send(Message.read(entry.content), self.now)
            except NotifyError as error:
                if not error.refused:
                    return done + self._rest(begun, ready[position + 1 :], str(error))
                done.append(self._end(begun, "failed", str(error)))
            except Exception as error:  # noqa: BLE001 - one message must not hold up all others
                what = f"{type(error).__name__}: {error}"
                done.append(self._end(begun, "failed", what, error))
            else:
                done.append(self._end(begun, "sent", note))
        return done

    def _given_up(self, waiting: Sequence[Entry]) -> tuple[list[Delivery], list[Entry]]:
        """Give up what died in its last try, and what is too old to be of use to anybody."""
        done, kept = list[Delivery](), list[Entry]()
        for entry in waiting:
            if entry.tries > self.notify.retries:
                what = entry.error or "the program ended while it was sent for the last time"
                done.append(self._end(entry, "failed", what))
            elif entry.tries == 0 and entry.due + self.notify.not_older_than < self.now:
                what = "too old when it could have been sent: the daemon did not run"
                done.append(self._end(entry, "failed", what))
            else:
                kept.append(entry)
        return done, kept

    def _out_of_quiet(self, waiting: list[Entry]) -> list[Entry]:
        """Leave out what was told lately; of what has come up meanwhile, keep the newest."""
        if not self.notify.quiet or not waiting:
            return waiting
        sent = self.box.last_sent(self.notify.id)
        quiet = {
            entry.about
            for entry in waiting
            if entry.about in sent and self.now < sent[entry.about] + self.notify.quiet
        }
        newest = {entry.about: entry.notification_id for entry in waiting}
        free = [entry for entry in waiting if entry.about not in quiet]
        older = [entry for entry in free if newest[entry.about] != entry.notification_id]
        gone = {"state": "superseded", "ended": self.now}
        if older:
            self.box.change({entry.notification_id: gone for entry in older})
        return [entry for entry in free if newest[entry.about] == entry.notification_id]

    def _begin(self, entry: Entry) -> Entry:
        """Write the try down before it is made: a store that cannot be written sends nothing."""
        begun = self._counted(entry)
        self.box.change({entry.notification_id: {"tries": begun.tries, "due": begun.due}})
        return begun

    def _counted(self, entry: Entry) -> Entry:
        tries = entry.tries + 1
        return replace(entry, tries=tries, due=int(self.now + wait_after(self.notify, tries)))

    def _end(
        self,
        entry: Entry,
        outcome: Literal["sent", "failed"],
        error: str = "",
        fault: Exception | None = None,
    ) -> Delivery:
        values = {"state": outcome, "ended": self.now, "error": error}
        self.box.change({entry.notification_id: values})
        return _delivery(self.notify, entry, outcome, error, fault)

    def _rest(self, begun: Entry, others: Sequence[Entry], error: str) -> list[Delivery]:
        """The target does not work: what was due was tried with it, and waits."""
        due = [begun, *(self._counted(entry) for entry in others if entry.due <= self.now)]
        changes: dict[int, dict[str, Any]] = {}
        done: list[Delivery] = []
        for entry in due:
            over = entry.tries > self.notify.retries
            changes[entry.notification_id] = {
                "tries": entry.tries,
                "due": entry.due,
                "error": error,
                **({"state": "failed", "ended": self.now} if over else {}),
            }
            if over or entry is begun:
                done.append(_delivery(self.notify, entry, "failed" if over else "waiting", error))
        self.box.change(changes)
        return done


def _delivery(
    notify: Notify,
    entry: Entry,
    outcome: Literal["sent", "waiting", "failed"],
    error: str = "",
    fault: Exception | None = None,
) -> Delivery:
    return Delivery(notify.id, Message.read(entry.content).title, outcome, error, fault)
