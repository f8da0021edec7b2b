"""What a correction comes to: worked out inside its transaction, or shown beforehand to whoever means to make it."""

from collections.abc import Iterable
from dataclasses import replace
from datetime import datetime

from service.domain.chain import json_of
from service.domain.correcting import Action, Correction, Piece, replacement_of, replayed, settled, unit_in
from service.domain.errors import ChangesNothing, Fault, InvalidCorrection
from service.domain.procedure import Procedure
from service.domain.sequential_test import SequentialTest
from service.ingest.commands import PostCorrection
from service.storage.logs import Log


def worked_out(
    command: PostCorrection, test: SequentialTest, procedure: Procedure, log: Log, now: datetime
) -> tuple[Correction, str | None, str | None]:
    """
    The correction with the state after it, and the units that it frees and takes; nothing is written.

    The log is run again from the first observation that was ever corrected, a page at a time.

    Args:
        command: What is asked.
        test: As it stands.
        procedure: Its plan, compiled.
        log: Of the same moment as the test.
        now: When the correction is received.

    Raises:
        InvalidCorrection: It cannot be right.
        ChangesNothing: The observation counts so already.
    """
    at = command.observation
    if at > test.state.sequence:
        rule = f"must be an observation of this test, 1 to {test.state.sequence}; received {at}"
        raise InvalidCorrection([Fault("/sequence", rule)])
    posted, present = log.observation(test, procedure.family, at)
    new = None if command.replacement is None else replacement_of(procedure, posted, present, command.replacement)
    if new == present:
        raise ChangesNothing(at)
    correction = Correction(
        test=test.key,
        observation=at,
        action=Action.VOID if new is None else Action.REPLACE,
        replacement=None if new is None else json_of(new),
        reason=command.reason,
        body_digest=command.body_digest,
        received_at=now,
        actor=command.actor,
        idempotency_key=command.idempotency_key,
        version=test.version + 1,
        before=test.state.decision,
        state=test.state,
        request_id=command.request_id,
    )
    start = log.state_before(test.key, min(at, log.first_corrected(test.key) or at))

    def read(after: int, through: int) -> Iterable[Piece]:
        return log.pieces(test, after, through, {at: correction})

    state = settled(test.state, replayed(procedure, start, read, test.state.sequence), now)
    freed, taken = unit_in(present), unit_in(new)
    unit_stays = freed == taken
    return replace(correction, state=state), None if unit_stays else freed, None if unit_stays else taken
