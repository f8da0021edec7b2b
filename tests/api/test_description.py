"""The API description is complete: an example for every body and every problem."""

import httpx
import pytest

from service.api import problems
from service.api.schemas import (
    acts,
    administration,
    assumptions,
    characteristics,
    events,
    history,
    inference,
    notices,
    observations,
    outlook,
    plans,
    simulations,
    subjects,
    tests,
)
from service.api.schemas.common import Answer
from service.domain import errors
from service.domain.errors import DomainError

MODULES = (
    acts,
    administration,
    assumptions,
    characteristics,
    events,
    history,
    inference,
    notices,
    observations,
    outlook,
    plans,
    simulations,
    subjects,
    tests,
)


@pytest.fixture(scope="module")
def description(admin: httpx.Client) -> dict:  # type: ignore[type-arg]
    return admin.get("/openapi.json").json()  # type: ignore[no-any-return]


def operations(description: dict) -> list[tuple[str, dict]]:  # type: ignore[type-arg]
    return [
        (f"{method} {path}", operation)
        for path, methods in description["paths"].items()
        for method, operation in methods.items()
    ]


def test_every_error_of_the_domain_has_a_problem() -> None:
    def leaves(kind: type[DomainError]) -> set[type[DomainError]]:
        below = kind.__subclasses__()
        return set().union(*(leaves(sub) for sub in below)) if below else {kind}

    assert leaves(DomainError) == set(problems.OF_ERRORS)
    assert set(problems.OF_ERRORS.values()) <= set(problems.PROBLEMS)


def test_the_drawing_of_the_errors_names_them_all() -> None:
    drawing = errors.__doc__ or ""
    assert all(kind.__name__ in drawing for kind in problems.OF_ERRORS)


def test_every_body_has_an_example(description: dict) -> None:  # type: ignore[type-arg]
    schemas = description["components"]["schemas"]
    for name, operation in operations(description):
        if "requestBody" in operation:
            reference = operation["requestBody"]["content"]["application/json"]["schema"]["$ref"]
            assert schemas[reference.rpartition("/")[2]]["examples"], name


def test_every_plan_that_is_shown_can_be_made(admin: httpx.Client) -> None:
    for plan in plans.EXAMPLES:
        assert admin.post("/v1/plans", json={**plan, "name": f"shown-{plan['name']}"}).status_code == 201


def test_every_problem_has_an_example(description: dict) -> None:  # type: ignore[type-arg]
    shown = {
        example
        for _, operation in operations(description)
        for response in operation["responses"].values()
        for example in response.get("content", {}).get(problems.MEDIA_TYPE, {}).get("examples", {})
    }
    assert set(problems.PROBLEMS) - shown <= {"method-not-allowed"}
    assert description["components"]["examples"].keys() == problems.PROBLEMS.keys()


def test_every_answer_has_an_example_that_fits_it(description: dict) -> None:  # type: ignore[type-arg]
    schemas = description["components"]["schemas"]
    models = {
        model.__name__: model
        for module in MODULES
        for model in vars(module).values()
        if isinstance(model, type) and issubclass(model, Answer)
    }
    for name, operation in operations(description):
        for status, response in operation["responses"].items():
            if "text/event-stream" in response["content"]:
                told = response["content"]["text/event-stream"]["example"]
                (data,) = (line.removeprefix("data: ") for line in told.splitlines() if line.startswith("data: "))
                events.TestEventOut.model_validate_json(data)
            elif "text/plain" in response["content"]:
                assert response["content"]["text/plain"]["example"].endswith("\n")
            elif int(status) < 300:
                schema = response["content"]["application/json"]["schema"]
                for choice in schema.get("anyOf", [schema]):
                    model = choice["$ref"].rpartition("/")[2]
                    (example,) = schemas[model]["examples"]
                    assert example.keys() <= schemas[model]["properties"].keys(), name
                    models[model].model_validate(example)


def test_no_operation_promises_the_frameworks_own_errors(description: dict) -> None:  # type: ignore[type-arg]
    assert "HTTPValidationError" not in str(description)
    for name, operation in operations(description):
        for status, response in operation["responses"].items():
            if int(status) >= 400:
                assert list(response["content"]) == [problems.MEDIA_TYPE], (name, status)
