"""The outbox comes into stores that were there before it, and outlives a process that is killed."""

from __future__ import annotations

import json
import signal
import subprocess
import sys
from pathlib import Path

import pytest
import sqlalchemy as sa
from alembic import command
from alembic.config import Config
from notify_samples import NOW, SECRET

import monitor.store
from monitor.notify.queue import queue_alarms
from monitor.store.engine import make_engine, writing
from monitor.store.open import open_store


def test_a_store_from_before_gets_an_outbox_and_keeps_what_it_has(store_url, tmp_path):
    engine = make_engine(store_url, tmp_path)
    config = Config()
    folder = Path(monitor.store.__file__).parent / "migrations"
    config.set_main_option("script_location", str(folder))
    config.set_main_option("path_separator", "os")
    with writing(engine, "make the first schema") as connection:
        config.attributes["connection"] = connection
        command.upgrade(config, "0001")
        connection.execute(
            sa.text(
                "insert into sites (site_id, site, name, interval_s, time_zone, calendar) "
                "values (7, 'mill', 'The mill', 900, 'UTC', '')"
            )
        )
        assert not sa.inspect(connection).has_table("notifications")
    engine.dispose()
    with open_store(store_url, tmp_path) as store, store.engine.connect() as connection:
        assert store.sites() == ("mill",)
        assert connection.execute(sa.text("select count(*) from notifications")).scalar() == 0
        assert connection.execute(sa.text("select count(*) from v_notifications")).scalar() == 0


KILLED = """
import os, signal, sys
from pathlib import Path
from monitor.commands.opening import opened
from monitor.notify.deliver import deliver
from monitor.notify.sender import make_senders

class Killed:
    def __init__(self, sender):
        self.sender = sender

    def send(self, message, now):
        self.sender.send(message, now)
        os.kill(os.getpid(), signal.SIGKILL)

with opened(Path(sys.argv[1])) as at:
    senders = {name: Killed(sender) for name, sender in make_senders(at.site).items()}
    deliver(at.store, at.site, int(sys.argv[2]), senders)
"""


@pytest.mark.skipif(sys.platform == "win32", reason="kills a process with a POSIX signal")
def test_a_process_killed_after_sending_leaves_a_message_that_comes_again_once(
    told, web_server, hook_table, store_url
):
    web = web_server()
    at = told(hook_table(web.url), store=store_url)
    at.raise_alarm()
    queue_alarms(at.site, at.store, at.now)
    done = subprocess.run(
        [sys.executable, "-c", KILLED, at.site.path, str(NOW)],
        check=False, capture_output=True, timeout=120,
    )  # fmt: skip
    assert done.returncode == -signal.SIGKILL, done.stderr
    for _ in range(5):
        at.minute()
    one, other = (json.loads(body) for _, _, body in web.requests)
    assert one["id"] == other["id"]
    assert at.states() == [("hook", "raised", "sent")]
    # Nothing of what was sent or stored holds the secret it was signed with.
    assert SECRET not in json.dumps([vars(e) for e in at.box.entries()])
    assert SECRET not in json.dumps([[p, h, b.decode()] for p, h, b in web.requests])
