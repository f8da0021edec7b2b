"""Posts and corrections in any order come to what the observations that are left come to, and stand an audit."""

import hashlib
import json
import random
from datetime import timedelta
from functools import partial
from pathlib import Path

from service.domain.checking import checked_content
from service.domain.observing import observe
from service.domain.procedure import procedure_of
from service.domain.sequential_test import Subject, SubjectKind
from service.domain.state import State
from service.ingest.commands import CreatePlan, PostCorrection, PostObservations, RegisterTest
from service.ingest.road import perform_now
from service.storage.auditing import audited, snapshot
from service.storage.engine import create_engine_for
from service.storage.migrate import upgrade
from service.storage.reader import Reader
from tests.ingest.test_road import NOW

PLAN = {"family": "bernoulli", "h0": 0.1, "h1": 0.4, "alpha": 0.02, "beta": 0.02, "boundaries": "wald"}


def test_any_order_of_posts_and_corrections(tmp_path: Path) -> None:
    """Six tests of thirty acts each, with every state compared; decisions fall, are put off and come back."""
    engine, chance = create_engine_for(f"sqlite:///{tmp_path / 'corrected.sqlite3'}"), random.Random(11)
    upgrade(engine)
    perform_now(engine, CreatePlan("p", checked_content({**PLAN, "statistic": "simple"}), "me"))
    reader = Reader(engine)
    plan = reader.plan("p")
    assert plan is not None
    procedure, decisions, changed = procedure_of(plan), set(), 0
    moments = (NOW + timedelta(seconds=i) for i in range(10_000))
    for number in range(6):
        key, kept = f"lot-{number}", dict[int, int]()
        perform_now(engine, RegisterTest(key, "p", Subject(SubjectKind.LOT, key), {}, "me"), lambda: next(moments))
        length, is_changed = 0, False
        for _ in range(30):
            if length == 0 or chance.random() < 0.5:
                values = [int(chance.random() < 0.2) for _ in range(chance.randint(1, 4))]
                kept |= {length + i: value for i, value in enumerate(values, start=1)}
                length += len(values)
                body = json.dumps({"values": values})
                digest = hashlib.sha256(body.encode()).hexdigest()
                perform_now(engine, PostObservations(key, body, json.loads(body), digest, "me"), lambda: next(moments))
            else:
                at, value = chance.randint(1, length), chance.choice([None, 0, 1])
                new = None if value is None else {"value": value}
                if kept.get(at) == value:
                    continue
                correction = PostCorrection(key, at, new, "typo", "d", "me", may_correct_decided=True)
                perform_now(engine, correction, lambda: next(moments))
                kept = {**kept, at: value} if value is not None else {i: v for i, v in kept.items() if i != at}
            test = reader.test(key)
            assert test is not None
            is_changed = test.decision_changed
            left = [kept[i] for i in sorted(kept)]
            clean = observe(procedure, State(), {"values": left}, NOW) if left else State()
            assert (test.state.sequence, test.state.voided) == (length, length - len(left))
            for name in ("sample_number", "total", "log_likelihood_ratio", "decision", "overrun"):
                assert getattr(test.state, name) == getattr(clean, name), name
            decisions.add(test.state.decision)
        changed += is_changed
    assert len(decisions) == 3
    assert changed > 0
    assert [audit.difference for audit in audited(partial(snapshot, engine)) if audit.difference] == []
    engine.dispose()
