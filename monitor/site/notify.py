"""One [[notify]] table of the site file: whom to tell, of what, and how."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Field, SecretStr, model_validator

from monitor.notify.checks import DEFAULT_NOT_OLDER_THAN, complaints
from monitor.site.fields import Duration, Identifier, Table

__all__ = ["Notify"]


class Notify(Table):
    """[[notify]]: whom to tell of alarms and failed jobs; keys of a kind belong to it alone.

    ``on`` names what is told: alarms that are raised, alarms that return to normal, jobs of the
    daemon that fail and work again. ``least_priority`` holds for alarms.
    """

    id: Identifier
    kind: Literal["email", "webhook", "command"]
    on: tuple[Literal["alarm", "return", "job"], ...] = Field(
        default=("alarm", "return", "job"), min_length=1
    )
    least_priority: Literal["low", "medium", "high"] = "low"
    quiet: Duration = 0.0
    not_older_than: Duration = DEFAULT_NOT_OLDER_THAN
    retries: int = Field(default=12, ge=0, le=100)
    retry_wait: Annotated[Duration, Field(ge=1)] = 60.0
    timeout: Annotated[Duration, Field(ge=0.1, le=60)] = 10.0
    pages_url: str = ""
    host: str = ""
    port: int | None = Field(default=None, ge=1, le=65535)
    tls: Literal["starttls", "implicit", "none"] = "starttls"
    from_: str = Field(default="", alias="from")
    to: tuple[str, ...] = ()
    user: str = ""
    password: SecretStr = SecretStr("")
    url: SecretStr = SecretStr("")
    secret: SecretStr = SecretStr("")
    ca_file: str = ""
    command: tuple[str, ...] = ()
    environment: tuple[str, ...] = ()

    @model_validator(mode="after")
    def _fits_its_kind(self) -> Notify:
        given = {
            field.alias or name: getattr(self, name)
            for name, field in type(self).model_fields.items()
            if name in self.model_fields_set
        }
        plain = {
            key: value.get_secret_value() if isinstance(value, SecretStr) else value
            for key, value in given.items()
        }
        found = "; ".join(complaints(self.kind, plain))
        if found:
            raise ValueError(found)
        return self
