"""Reads that several routes share."""

from service.domain.errors import UnknownPlan, UnknownTest
from service.domain.plan import Plan
from service.domain.sequential_test import SequentialTest
from service.web.parts import Parts, looking_up


async def known_test(parts: Parts, key: str) -> tuple[SequentialTest, Plan]:
    """
    A test with its plan.

    Raises:
        UnknownTest: There is none of this key.
    """
    return await looking_up(parts, lambda: _test_with_plan(parts, key))


async def known_plan(parts: Parts, name: str) -> Plan:
    """
    A stored plan.

    Raises:
        UnknownPlan: There is none of this name.
    """
    plan = await looking_up(parts, lambda: parts.reader.plan(name))
    if plan is None:
        raise UnknownPlan(name)
    return plan


def _test_with_plan(parts: Parts, key: str) -> tuple[SequentialTest, Plan]:
    test = parts.reader.test(key)
    if test is None:
        raise UnknownTest(key)
    plan = parts.reader.plan(test.plan)
    if plan is None:
        raise UnknownPlan(test.plan)
    return test, plan
