"""Questions about a test that need its log read."""

import json

from service.domain.assumptions import Assumptions, assumptions_of, stretch_of
from service.domain.inference import inference_of
from service.domain.inferred import Inference
from service.domain.plan import Plan
from service.domain.procedure import procedure_of
from service.domain.sequential_test import SequentialTest
from service.storage.reader import Reader


def inference_for(reader: Reader, test: SequentialTest, plan: Plan, level: float) -> Inference:
    """
    The inference of a decided test.

    Raises:
        ComputationTooLarge: As `domain.inference.inference_of`.
    """
    bodies = reader.log.bodies(test, 0, test.state.sequence)
    return inference_of(plan.document, test.state, ((first, json.loads(body)) for first, body in bodies), level)


def assumptions_for(reader: Reader, test: SequentialTest, plan: Plan) -> Assumptions:
    """The checks of a test's results."""
    stretch = stretch_of(test.state)
    bodies = reader.log.bodies(test, stretch.first - 1, stretch.last)
    return assumptions_of(procedure_of(plan), test.state, bodies)
