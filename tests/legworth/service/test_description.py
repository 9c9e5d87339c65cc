"""The service does what its OpenAPI description says, and nothing else, whatever is asked.

``LEGWORTH_SCHEMA_EXAMPLES=500 python -m pytest tests/legworth/service/test_description.py`` asks more.
"""

from __future__ import annotations

import os
import shutil
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest
import schemathesis
from hypothesis import HealthCheck, Phase, given, settings
from schemathesis import GenerationMode
from schemathesis.specs.openapi.checks import positive_data_acceptance

from legworth.service.app import make_app
from legworth.service.settings import ServiceSettings
from legworth.service.tokens import TokenFile
from legworth.store import Store
from tests.legworth.service.stores import AS_OF

EXAMPLES = int(os.environ.get("LEGWORTH_SCHEMA_EXAMPLES", "12"))
HOW = settings(
    max_examples=EXAMPLES,
    deadline=None,
    derandomize=True,
    database=None,
    phases=[Phase.explicit, Phase.generate],
    suppress_health_check=list(HealthCheck),
)


def _name_what_there_is(case: Any) -> None:
    """Put names of the hub in the place of most of those drawn, so that not all is unknown."""
    body = case.body if isinstance(case.body, dict) else {}
    if isinstance(body.get("itinerary"), str):
        body["itinerary"] = ("IN0-OUT1", "OUT2.1", body["itinerary"])[len(body["itinerary"]) % 3]
    if isinstance(body.get("legs"), list):
        body["legs"] = (["IN0", "OUT1"], ["IN1.1"], body["legs"])[len(body["legs"]) % 3]
    if isinstance(body.get("itinerary"), list):
        count = len(body["itinerary"])
        body["itinerary"] = [("IN0-OUT1", "OUT2.1", name)[place % 3] for place, name in enumerate(body["itinerary"])]
        for name in ("fare", "fare_class", "seats"):
            if isinstance(body.get(name), list):
                body[name] = (body[name] * count)[:count] or None
        if not body.get("fare") and not body.get("fare_class"):
            body["fare"] = [100.0] * count
    for name, known in (("leg", "IN0"), ("itinerary", "IN0-OUT1"), ("night", "00001-2027-03-01")):
        if name in (case.path_parameters or {}) and len(case.path_parameters[name]) % 2:
            case.path_parameters[name] = known


def _checker(token: str, statuses: set[int], mode: GenerationMode) -> Callable[[Any], None]:
    def holds(case: Any) -> None:
        if mode is GenerationMode.POSITIVE:
            _name_what_there_is(case)
        # That columns are as long as each other, and legs follow one another, no schema can say.
        answer = case.call_and_validate(
            headers={"Authorization": f"Bearer {token}"}, excluded_checks=[positive_data_acceptance]
        )
        # Where all that is wrong is the token, the good one has mended it.
        if mode is GenerationMode.POSITIVE or "authorization" not in map(str.lower, case.headers or {}):
            statuses.add(answer.status_code)

    return holds


REACHED = {
    "GET /v1/health",
    "POST /v1/decisions",
    "POST /v1/decisions/batch",
    "POST /v1/sales",
    "PUT /v1/seat-counts",
    "GET /v1/legs/{leg}",
    "GET /v1/itineraries/{itinerary}",
    "GET /v1/nights",
    "GET /v1/nights/{night}",
    "GET /metrics",
}
"""Operations that some requests drawn are to reach; a cancellation needs a sale of that very key, and luck."""


@pytest.mark.parametrize("mode", list(GenerationMode))
def test_answers_are_as_described(published_hub: Path, tmp_path: Path, mode: GenerationMode) -> None:
    shutil.copytree(published_hub, tmp_path / "store")
    token = TokenFile(tmp_path / "store" / "tokens.json").make("tester", ["ask", "sell", "count"])
    app = make_app(Store.open(tmp_path / "store"), ServiceSettings(), AS_OF)
    schema = schemathesis.openapi.from_asgi("/v1/openapi.json", app)
    answered: dict[str, set[int]] = {}
    for found in schema.get_all_operations():
        operation = found.ok()
        if mode is GenerationMode.NEGATIVE and not operation.body and not list(operation.iter_parameters()):
            continue  # nothing can be wrong with it
        statuses = answered.setdefault(operation.label, set())

        holds = HOW(given(operation.as_strategy(generation_mode=mode))(_checker(token, statuses, mode)))
        holds()
    if mode is GenerationMode.POSITIVE:
        assert {label for label, statuses in answered.items() if 200 in statuses} >= REACHED
    else:
        assert len(answered) == 8
        assert not any(200 in statuses for label, statuses in answered.items() if not label.startswith("GET"))
    assert all(status < 500 for statuses in answered.values() for status in statuses)
