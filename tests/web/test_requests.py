"""Unexpected errors, and callers who leave."""

import asyncio
import json
import logging

import pytest
from starlette.requests import ClientDisconnect
from starlette.types import Message, Receive, Scope, Send

from service.api.problems import internal_error
from service.web.requests import RequestId


def answered(error: Exception, *, has_started: bool = False) -> list[Message]:
    """What is sent to the caller of an application that fails with this error."""
    sent: list[Message] = []

    async def failing(_scope: Scope, _receive: Receive, send: Send) -> None:
        if has_started:
            await send({"type": "http.response.start", "status": 200, "headers": []})
        raise error

    async def receive() -> Message:
        return {"type": "http.disconnect"}

    async def send(message: Message) -> None:
        sent.append(message)

    asyncio.run(RequestId(failing, internal_error)({"type": "http"}, receive, send))
    return sent


def test_an_unexpected_error_is_answered_under_the_request_id_and_logged_once(caplog: pytest.LogCaptureFixture) -> None:
    start, body = answered(RuntimeError("the secret reason"))
    request_id = dict(start["headers"])[b"x-request-id"].decode()
    assert start["status"] == 500
    problem = json.loads(body["body"])
    assert problem["type"].endswith(":internal-error")
    assert request_id in problem["detail"]
    assert "secret" not in problem["detail"]
    (record,) = caplog.records
    assert (record.levelno, request_id in record.getMessage()) == (logging.ERROR, True)


def test_half_an_answer_is_broken_off() -> None:
    with pytest.raises(RuntimeError):
        answered(RuntimeError("late"), has_started=True)


def test_a_caller_who_leaves_is_no_error(caplog: pytest.LogCaptureFixture) -> None:
    assert answered(ClientDisconnect()) == []
    assert all(record.levelno < logging.WARNING for record in caplog.records)
