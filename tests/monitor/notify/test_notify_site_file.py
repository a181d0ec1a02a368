"""What a [[notify]] table may say, and what a person who gets it wrong is told."""

from __future__ import annotations

import pydantic
import pytest

from monitor.errors import SiteFileError
from monitor.notify.checks import KEYS_OF_KIND
from monitor.site.load import load_site
from monitor.site.notify import Notify

URL_SECRET = "T0K3N-in-the-path"  # noqa: S105 - made up
MAIL = {"id": "m", "kind": "email", "host": "mail.plant.example", "from": "a@plant.example",
        "to": ["b@plant.example"]}  # fmt: skip
HOOK = {"id": "h", "kind": "webhook", "url": f"https://plant.example/{URL_SECRET}",
        "secret": "0123456789abcdef"}  # fmt: skip
COMMAND = {"id": "c", "kind": "command", "command": ["page"]}


def complaint(table):
    with pytest.raises(pydantic.ValidationError) as caught:
        Notify.model_validate(table)
    return caught.value.errors()[0]["msg"].removeprefix("Value error, ")


@pytest.mark.parametrize("table", [MAIL, HOOK, COMMAND], ids=lambda t: t["kind"])
def test_the_required_keys_are_enough(table):
    notify = Notify.model_validate(table)
    assert notify.on == ("alarm", "return", "job")
    assert (notify.retries, notify.retry_wait, notify.quiet) == (12, 60, 0)
    assert (notify.not_older_than, notify.timeout, notify.least_priority) == (86400, 10, "low")


@pytest.mark.parametrize(
    ("table", "key"),
    [(t, k) for t in (MAIL, HOOK, COMMAND) for k in t if k not in {"id", "kind"}],
    ids=lambda v: v if isinstance(v, str) else v["kind"],
)
def test_a_missing_key_is_named(table, key):
    assert complaint({k: v for k, v in table.items() if k != key}).startswith(f"'{key}' is missing")


@pytest.mark.parametrize(
    ("table", "change", "said"),
    [
        (MAIL, {"url": "https://x.example"}, "'url' does not belong to kind \"email\""),
        (HOOK, {"to": ["a@b.example"]}, "'to' does not belong to kind \"webhook\""),
        (MAIL, {"from": "Plant <a@b.example>"}, "is no e-mail address"),
        (MAIL, {"to": ["b@plant.example\nBcc: c@evil.example"]}, "is no e-mail address"),
        (MAIL, {"to": ["b@plant.example, c@plant.example"]}, "is no e-mail address"),
        (MAIL, {"to": []}, "'to' is missing"),
        (MAIL, {"host": "mail server"}, "'host' is no host name"),
        (MAIL, {"user": "u"}, "both 'user' and 'password'"),
        (MAIL, {"password": "p"}, "both 'user' and 'password'"),
        (MAIL, {"user": "u", "password": "p", "tls": "none"}, "not sent without TLS"),
        (MAIL, {"user": "u\r\n", "password": "p"}, "control character"),
        (HOOK, {"url": "http://plant.example/"}, "'url' must begin with https://"),
        (HOOK, {"url": "ftp://localhost/"}, "'url' must begin with https://"),
        (HOOK, {"url": "https://a:b@plant.example/"}, "'url' holds a user"),
        (HOOK, {"url": "https://plant.example/\r\nHost: evil"}, "'url' is no URL"),
        (HOOK, {"url": "https://plant.example:many/"}, "'url' is no URL"),
        (HOOK, {"secret": "short"}, "'secret' is shorter than 16"),
        (COMMAND, {"command": ["a", "b\0"]}, "zero character"),
        (COMMAND, {"environment": ["TOKEN=x"]}, "names of variables"),
        (COMMAND, {"quiet": "2 day"}, "'quiet' is longer than 'not_older_than'"),
    ],
)
def test_a_mistake_is_answered_with_what_would_be_right(table, change, said):
    assert said in complaint({**table, **change})


def test_every_key_belongs_to_all_kinds_or_to_known_ones():
    own = {key for keys in KEYS_OF_KIND.values() for key in keys}
    known = {field.alias or name for name, field in Notify.model_fields.items()}
    assert own < known


def test_secrets_stand_in_no_text_of_a_table():
    text = repr(Notify.model_validate(HOOK)) + repr(
        Notify.model_validate({**MAIL, "user": "u", "password": "hunter2"})
    )
    assert not any(secret in text for secret in ("hunter2", HOOK["secret"], URL_SECRET))


def test_a_mistake_beside_a_secret_does_not_show_it(make_plant, tmp_path, monkeypatch):
    monkeypatch.setenv("LOSTWORK_TEST_SECRET", URL_SECRET)
    plant = make_plant(tmp_path / "site", days=0.05)
    text = plant.path.read_text()
    tables = [
        'id = "a"\nkind = "webhook"\nurl = "http://x.example/${LOSTWORK_TEST_SECRET}"',
        'id = "b"\nkind = "email"\nuser = "u"\npasword = "${LOSTWORK_TEST_SECRET}"',
        'id = "c"\nkind = "webhook"\nurl = ["${LOSTWORK_TEST_SECRET}"]\nsecret = "x"',
    ]
    plant.path.write_text(text + "".join(f"\n[[notify]]\n{table}\n" for table in tables))
    with pytest.raises(SiteFileError) as caught:
        load_site(plant.path)
    said = str(caught.value)
    assert URL_SECRET not in said
    assert "'url' must begin with https://" in said
    assert "[[notify]] 'b', pasword: is not a key of this table; did you mean 'password'?" in said
    plant.path.write_text(text + f"\n[[notify]]\n{tables[0]}\nform = 1\n" * 2)
    with pytest.raises(SiteFileError, match=r"form: is not a key .* did you mean 'from'"):
        load_site(plant.path)


def test_two_targets_need_two_names(make_plant, tmp_path):
    plant = make_plant(tmp_path / "site", days=0.05)
    table = '\n[[notify]]\nid = "p"\nkind = "command"\ncommand = ["page"]\n'
    plant.path.write_text(plant.path.read_text() + table + table)
    with pytest.raises(SiteFileError, match=r"\[\[notify\]\] 'p': stands 2 times"):
        load_site(plant.path)
