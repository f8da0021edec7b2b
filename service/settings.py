"""Settings: the environment, read into one frozen value."""

import re
from typing import Literal

from pydantic import Field, ValidationError, field_validator
from pydantic_settings import BaseSettings, SettingsConfigDict

from service.domain.addresses import Allowed

_ORIGIN = re.compile(r"https?://[a-z0-9.-]+(:[0-9]{1,5})?|https?://\[[0-9a-f:]+\](:[0-9]{1,5})?")


def origins_in(text: str) -> list[str]:
    """What stands between commas."""
    return [part.strip() for part in text.split(",") if part.strip()]


class Settings(BaseSettings):
    """Each field is the environment variable of the same name with the prefix SPRT_."""

    model_config = SettingsConfigDict(env_prefix="SPRT_", frozen=True)

    database_url: str = Field("sqlite:///sprt-monitor.sqlite3", description="SQLite file or PostgreSQL server.")
    max_body_bytes: int = Field(8 * 1024 * 1024, ge=1024, description="Largest body of a request.")
    max_batch: int = Field(100_000, ge=1, description="Most observations in one submission.")
    queue_limit: int = Field(1000, ge=1, description="Submissions that may wait to be written.")
    queue_bytes: int = Field(256 * 1024 * 1024, ge=1024, description="Bytes of submissions that may wait.")
    group_limit: int = Field(256, ge=1, description="Submissions committed together.")
    stream_limit: int = Field(100, ge=1, description="Streams of events that may be open in one process.")
    body_seconds: float = Field(30.0, gt=0.0, le=3600.0, description="Longest time for a body to arrive.")
    connection_limit: int = Field(1000, ge=2, description="Connections that one process holds at once.")
    rate_limit: float = Field(0.0, ge=0.0, le=1e6, description="Requests a second of one key; 0 for any number.")
    rate_burst: int = Field(100, ge=1, le=10**6, description="Requests of one key at once, before the rate counts.")
    cors_origins: str = Field("", description="Origins, with commas between, whose pages may ask.")
    session_hours: float = Field(10.0, gt=0.0, le=168.0, description="How long somebody stays signed in on the pages.")
    heartbeat_seconds: float = Field(15.0, ge=1.0, le=30.0, description="Between signs of life on a quiet stream.")
    notice_plain_http: bool = Field(default=False, description="Receivers of notices may be addressed by plain HTTP.")
    notice_private_targets: bool = Field(default=False, description="Notices may go to private addresses.")
    notice_timeout_seconds: float = Field(10.0, ge=0.1, le=300.0, description="Longest time for one attempt.")
    notice_attempts: int = Field(12, ge=1, le=1000, description="Attempts before a notice is dead.")
    notice_wait_seconds: float = Field(5.0, ge=0.01, le=3600.0, description="Wait after a notice's first attempt.")
    notice_keep_days: float = Field(30.0, gt=0.0, le=36500.0, description="How long a delivered notice is kept.")
    log_format: Literal["plain", "json"] = Field("plain", description="Form of the log.")
    access_log: bool = Field(default=True, description="One line for each request.")
    metrics_open: bool = Field(default=False, description="Show /metrics without a key.")
    log_level: Literal["DEBUG", "INFO", "WARNING", "ERROR"] = Field("INFO", description="Level of the log.")

    @field_validator("cors_origins")
    @classmethod
    def _are_origins(cls, text: str) -> str:
        """Each is a scheme, a host and perhaps a port, as a browser sends it."""
        for origin in origins_in(text):
            if not _ORIGIN.fullmatch(origin):
                raise ValueError(f"an origin is http(s)://host or http(s)://host:port, never *; {origin!r} is none")
        return text

    @property
    def origins(self) -> list[str]:
        """The origins, one by one."""
        return origins_in(self.cors_origins)

    @property
    def notices_allowed(self) -> Allowed:
        """Where notices may go, beyond HTTPS to public addresses."""
        return Allowed(self.notice_plain_http, self.notice_private_targets)


class BadSettings(Exception):
    """The environment says something that cannot be right; the text is for people."""


def read_settings() -> Settings:
    """
    Read the environment now.

    Raises:
        BadSettings: A variable has a value that it cannot have.
    """
    try:
        return Settings()
    except ValidationError as error:
        faults = [
            f"SPRT_{str(item['loc'][0]).upper()}: {item['msg']}; received {item['input']!r}" for item in error.errors()
        ]
        raise BadSettings("\n".join(faults)) from None
