"""The API description: problem documents with an example for each, in place of the framework's own."""

from collections.abc import Callable
from typing import Any

from fastapi import FastAPI
from fastapi.openapi.utils import get_openapi

from service.api import problems
from service.api.schemas.common import Answer, FaultOut, ProblemOut
from service.domain.errors import Fault

EVERYWHERE = (
    "key-required",
    "role-required",
    "too-many-requests",
    "internal-error",
    "overloaded",
    "invalid-parameter",
)
WITH_BODY = ("outcome-unknown", "malformed-body", "body-too-slow", "body-too-large", "media-type", "invalid-body")


def answers_with(*names: str, has_body: bool = False) -> dict[int | str, dict[str, Any]]:
    """The problem answers of a route, by status, for the framework's `responses`."""
    grouped: dict[int | str, dict[str, Any]] = {}
    for name in (*names, *EVERYWHERE, *(WITH_BODY if has_body else ())):
        problem = problems.PROBLEMS[name]
        entry = grouped.setdefault(problem.status, {"description": problem.title, "content": {}})
        media = entry["content"].setdefault(
            problems.MEDIA_TYPE, {"schema": {"$ref": "#/components/schemas/ProblemOut"}, "examples": {}}
        )
        media["examples"][name] = _example(name)
    return grouped


def _restore_examples(schemas: dict[str, Any]) -> None:
    """Give the examples their nulls back, which the framework drops."""
    models = Answer.__subclasses__()
    for model in models:
        models.extend(model.__subclasses__())
        extra = model.model_config.get("json_schema_extra")
        if model.__name__ in schemas and isinstance(extra, dict):
            schemas[model.__name__]["examples"] = extra["examples"]


def _example(name: str) -> dict[str, Any]:
    """A problem document of this type, as an example of the description."""
    problem = problems.PROBLEMS[name]
    faults = [Fault(problem.pointer, "the rule; received the value")] if problem.pointer is not None else []
    return {"summary": problem.title, "value": problems.document(name, problem.example, faults)}


def describe(app: FastAPI) -> Callable[[], dict[str, Any]]:
    """A function for `app.openapi` that adds the schema of problems and the key's scheme."""

    def openapi() -> dict[str, Any]:
        if app.openapi_schema is None:
            description = get_openapi(
                title=app.title, version=app.version, description=app.description, routes=app.routes
            )
            components = description.setdefault("components", {})
            schemas = components.setdefault("schemas", {})
            for model in (FaultOut, ProblemOut):
                schemas[model.__name__] = model.model_json_schema(ref_template="#/components/schemas/{model}")
                schemas[model.__name__].pop("$defs", None)
            components["examples"] = {name: _example(name) for name in problems.PROBLEMS}
            _restore_examples(schemas)
            schemas.pop("HTTPValidationError", None)
            schemas.pop("ValidationError", None)
            components["securitySchemes"] = {"key": {"type": "http", "scheme": "bearer"}}
            for path, operations in description["paths"].items():
                for operation in operations.values():
                    operation["security"] = [{"key": []}] if path.startswith(("/v1", "/metrics")) else []
            app.openapi_schema = description
        return app.openapi_schema

    return openapi
