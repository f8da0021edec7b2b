"""What a notice says, how it is signed, and when it is tried again."""

import base64
import hashlib
import hmac
import json
from dataclasses import replace
from datetime import UTC, datetime, timedelta

import pytest
from hypothesis import given
from hypothesis import strategies as st

from service.domain.checking import checked_content
from service.domain.disposing import Disposition, Verdict
from service.domain.notices import (
    MOST_WAIT_SECONDS,
    Attempt,
    Notice,
    NoticeKind,
    NoticeState,
    Schedule,
    after_attempt,
    again,
    ids_before,
    message_of,
    notice_id,
    signature_of,
    wait_seconds,
)
from service.domain.observing import observe
from service.domain.plan import Plan, fingerprint_of
from service.domain.procedure import procedure_of
from service.domain.receivers import secret_of
from service.domain.sequential_test import SequentialTest, Status, Subject, SubjectKind
from service.domain.state import Decision, State
from tests.api.examples import PUMP, SEAL

NOW = datetime(2031, 5, 4, 9, 30, 0, 123456, tzinfo=UTC)
SCHEDULE = Schedule(attempts=5, first_wait_seconds=2.0)
NOTICE = Notice("n1", "r1", "lot-1", 2, NoticeKind.DECIDED, "{}", NOW, NOW, attempts=1, lease="l1")


def a_test(content: dict[str, object], values: list[object]) -> tuple[SequentialTest, Plan]:
    document = checked_content(content)
    plan = Plan("seal", document, fingerprint_of(document), NOW, "me")
    state = observe(procedure_of(plan), State(), {"values": values}, NOW)
    subject = Subject(SubjectKind.LOT, "2041/B")
    return SequentialTest("lot-1", "seal", subject, {"line": "3"}, Status.OPEN, 2, NOW, "me", NOW, state), plan


def test_a_published_example_is_signed_as_published() -> None:
    """The example of the scheme's reference libraries (recalled)."""
    signature = signature_of(
        "whsec_MfKQ9r8GKYqrTwjUPD8ILPZIo2LaLaSw",
        "msg_p5jXN8AQM9LWM0D4loKWxJek",
        1614265330,
        '{"test": 2432232314}',
    )
    assert signature == "v1,g0hM9SsE+OTPJTGt/tmIKtSyZlE3uFJELVlNIOLJ1OE="


@given(st.binary(min_size=24, max_size=64), st.text(max_size=50), st.integers(0, 2**40))
def test_a_signature_is_what_the_scheme_says(random: bytes, body: str, timestamp: int) -> None:
    body = body.encode("utf-8", "replace").decode()
    digest = hmac.digest(random, b"n1." + str(timestamp).encode() + b"." + body.encode(), hashlib.sha256)
    signature = signature_of(secret_of(random), "n1", timestamp, body)
    assert signature == "v1," + base64.b64encode(digest).decode()


def test_a_decision_is_told_with_what_it_stands_on() -> None:
    test, plan = a_test(SEAL, [0] * 25)
    message = json.loads(message_of(NoticeKind.DECIDED, test, plan, Decision.CONTINUE))
    at = "2031-05-04T09:30:00.123456Z"
    assert message == {
        "type": "test.decided",
        "timestamp": at,
        "data": {
            "key": "lot-1",
            "plan": "seal",
            "subject": {"kind": "lot", "name": "2041/B"},
            "labels": {"line": "3"},
            "decision": "accept",
            "previous_decision": "continue",
            # As the README shows it for the same results.
            "log_likelihood_ratio": pytest.approx(-2.2874443153037967, rel=1e-12),
            "sample_number": 24,
            "exposure": None,
            "decided": {"sample_number": 24, "exposure": None, "at": at, "cause": "boundary", "direction": None},
            "overrun": 1,
            "disposition": None,
            "status": "open",
            "version": 2,
        },
    }


def test_a_disposition_is_told_without_the_reasons_that_people_gave() -> None:
    test, plan = a_test(PUMP, [10.0])
    disposition = Disposition(Verdict.WITHDRAWN, "reason one", "reason two", "me", NOW)
    closed = replace(test, status=Status.CLOSED, disposition=disposition)
    text = message_of(NoticeKind.DISPOSED, closed, plan, test.state.decision)
    data = json.loads(text)["data"]
    assert "reason" not in text
    assert data["disposition"] == {
        "disposition": "withdrawn",
        "deviates": True,
        "by": "me",
        "at": "2031-05-04T09:30:00.123456Z",
    }
    assert (data["decision"], data["previous_decision"], data["status"]) == ("continue", "continue", "closed")
    assert (data["exposure"], data["decided"]) == (10.0, None)


def test_waits_grow_from_attempt_to_attempt_up_to_a_limit() -> None:
    waits = [wait_seconds(SCHEDULE, attempts, 0.0) for attempts in range(1, 1000)]
    assert waits[:4] == [2.0, 6.0, 18.0, 54.0]
    assert waits == sorted(waits)
    assert waits[-1] == MOST_WAIT_SECONDS


@given(st.integers(1, 10**6), st.floats(0.0, 1.0))
def test_the_jitter_shortens_a_wait_to_half_at_the_most(attempts: int, jitter: float) -> None:
    whole = wait_seconds(SCHEDULE, attempts, 0.0)
    assert whole / 2 <= wait_seconds(SCHEDULE, attempts, jitter) <= whole


def test_a_notice_is_delivered_waits_or_dies() -> None:
    failed = Attempt(is_delivered=False, outcome="answered 500")
    done = Attempt(is_delivered=True, outcome="answered 200")
    gone = Attempt(is_delivered=False, outcome="answered 410", is_final=True)
    later = NOW + timedelta(seconds=7)
    delivered = after_attempt(NOTICE, done, SCHEDULE, 0.5, later)
    assert (delivered.state, delivered.lease, delivered.outcome) == (NoticeState.DELIVERED, None, "answered 200")
    waiting = after_attempt(NOTICE, failed, SCHEDULE, 0.0, later)
    assert (waiting.state, waiting.due_at) == (NoticeState.WAITING, later + timedelta(seconds=2))
    assert after_attempt(NOTICE, gone, SCHEDULE, 0.0, later).state is NoticeState.DEAD
    states = [after_attempt(replace(NOTICE, attempts=n), failed, SCHEDULE, 0.0, later).state for n in range(1, 7)]
    assert states == [NoticeState.WAITING] * 4 + [NoticeState.DEAD] * 2
    assert after_attempt(replace(NOTICE, attempts=9), done, SCHEDULE, 0.0, later).state is NoticeState.DELIVERED
    once_more = again(after_attempt(NOTICE, gone, SCHEDULE, 0.0, NOW), later)
    assert (once_more.state, once_more.attempts, once_more.due_at) == (NoticeState.WAITING, 0, later)


@given(st.integers(0, 2**46), st.integers(0, 2**46))
def test_ids_sort_by_the_time_at_which_they_are_made(one: int, other: int) -> None:
    first, last = (datetime(1970, 1, 1, tzinfo=UTC) + timedelta(milliseconds=at) for at in sorted((one, other)))
    if last - first >= timedelta(milliseconds=1):
        assert notice_id(first, "ffffffffffffffff") < notice_id(last, "0000000000000000")
        assert notice_id(first, "ffffffffffffffff") < ids_before(last) <= notice_id(last, "0000000000000000")
    assert len(notice_id(last, "0123456789abcdef")) == 28
