"""The HTTP client behind `load` and `demo`: patient with a busy service, clear about a refusal."""

import time
from collections.abc import Mapping
from typing import Any

import httpx

ATTEMPTS = 8
LONGEST_PAUSE_SECONDS = 10.0
TIMEOUT_SECONDS = 60.0


class Refused(Exception):
    """The service answered with a problem; `faults` are pairs of a JSON pointer and a detail."""

    def __init__(self, status: int, problem: Mapping[str, Any]) -> None:
        super().__init__(f"{problem.get('title', 'Refused')}: {problem.get('detail', f'status {status}')}")
        self.status = status
        self.faults = [(fault["pointer"], fault["detail"]) for fault in problem.get("errors", [])]
        self.is_of_reused_key = str(problem.get("type", "")).endswith(":idempotency-key-reused")


class Unreachable(Exception):
    """No answer came in all attempts."""


class ServiceClient:
    """Calls under one address with one key; what may be tried again is tried again."""

    def __init__(self, url: str, key: str) -> None:
        self._http = httpx.Client(
            base_url=url, headers={"Authorization": f"Bearer {key}"}, timeout=TIMEOUT_SECONDS, trust_env=False
        )
        self._was_replay = False

    def get(self, path: str) -> dict[str, Any]:
        """
        Read.

        Raises:
            Refused: The service answered with a problem.
            Unreachable: No answer came.
        """
        return self._call("GET", path, None, {})

    @property
    def was_replay(self) -> bool:
        """Whether the last answer repeated that of an earlier submission, and nothing new was stored."""
        return self._was_replay

    def post(self, path: str, body: Mapping[str, Any], idempotency_key: str | None = None) -> dict[str, Any]:
        """
        Write. Give an idempotency key with whatever must not count twice: a lost answer is asked for again.

        Raises:
            Refused: The service answered with a problem.
            Unreachable: No answer came.
        """
        headers = {"Idempotency-Key": idempotency_key} if idempotency_key else {}
        return self._call("POST", path, body, headers)

    def _call(
        self, method: str, path: str, body: Mapping[str, Any] | None, headers: Mapping[str, str]
    ) -> dict[str, Any]:
        reason = ""
        for attempt in range(ATTEMPTS):
            try:
                answer = self._http.request(method, path, json=body, headers=headers)
            except httpx.TransportError as error:
                reason = str(error) or type(error).__name__
                time.sleep(_pause(attempt, None))
                continue
            if not _may_pass(answer):
                self._was_replay = answer.headers.get("Idempotent-Replayed") == "true"
                return _document(answer)
            reason = _problem(answer).get("detail", f"status {answer.status_code}")
            time.sleep(_pause(attempt, answer.headers.get("Retry-After")))
        raise Unreachable(f"No answer from {self._http.base_url} after {ATTEMPTS} attempts: {reason}")


def _may_pass(answer: httpx.Response) -> bool:
    """True for refusals that a little patience may cure."""
    if answer.status_code in {httpx.codes.TOO_MANY_REQUESTS, httpx.codes.SERVICE_UNAVAILABLE}:
        return True
    return answer.status_code == httpx.codes.CONFLICT and str(_problem(answer).get("type", "")).endswith(":in-progress")


def _document(answer: httpx.Response) -> dict[str, Any]:
    if answer.is_error:
        raise Refused(answer.status_code, _problem(answer))
    document: dict[str, Any] = answer.json()
    return document


def _problem(answer: httpx.Response) -> dict[str, Any]:
    try:
        document = answer.json()
    except ValueError:
        return {}
    return document if isinstance(document, dict) else {}


def _pause(attempt: int, retry_after: str | None) -> float:
    if retry_after is not None and retry_after.isdigit():
        return min(float(retry_after), LONGEST_PAUSE_SECONDS)
    return min(0.1 * 2.0**attempt, LONGEST_PAUSE_SECONDS)
