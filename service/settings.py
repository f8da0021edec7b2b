"""Settings: the environment, read into one frozen value."""

from typing import Literal

from pydantic import Field, ValidationError
from pydantic_settings import BaseSettings, SettingsConfigDict


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
    heartbeat_seconds: float = Field(15.0, ge=1.0, le=30.0, description="Between signs of life on a quiet stream.")
    log_level: Literal["DEBUG", "INFO", "WARNING", "ERROR"] = Field("INFO", description="Level of the log.")


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
