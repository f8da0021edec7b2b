"""Simulations in progress, and their results."""

from fastapi import APIRouter

from service.api.access import requires
from service.api.bodies import StrictRoute
from service.api.description import answers_with
from service.api.schemas.simulations import SimulationOut
from service.domain.access import Role
from service.web.parts import PartsOf

router = APIRouter(prefix="/v1/simulations", tags=["characteristics"], route_class=StrictRoute)


@router.get(
    "/{name}",
    responses=answers_with("not-found"),
    summary="How far a simulation is, and what it found",
    dependencies=[requires(Role.VIEWER)],
)
async def show_simulation(name: str, parts: PartsOf) -> SimulationOut:
    """Where the process that began it does not answer, 404: ask the first question again."""
    return SimulationOut.of(parts.simulations.known(name))


@router.delete(
    "/{name}",
    responses=answers_with("not-found"),
    summary="End a simulation and forget its result",
    dependencies=[requires(Role.VIEWER)],
)
async def end_simulation(name: str, parts: PartsOf) -> SimulationOut:
    """A running one ends after the batch that it is at."""
    return SimulationOut.of(parts.simulations.end(name))
