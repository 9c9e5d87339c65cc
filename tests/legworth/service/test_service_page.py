"""docs/service.md says what the service does: its settings are those there are, and its examples work."""

from __future__ import annotations

import asyncio
import json
import re
import shlex
from pathlib import Path
from typing import get_args, get_type_hints

from legworth.decisions import Reason
from legworth.service.messages import Health
from legworth.service.settings import ServiceSettings
from tests.legworth.service.in_process import running

ROOT = Path(__file__).parents[3]
PAGE = (ROOT / "docs" / "service.md").read_text(encoding="utf-8")
NAMES = {'"A"': '"Y"', "ORV-COR-0301-1": "IN0-OUT1", "ORV-SAL-0301-1": "IN0", "VL10-0301": "IN0", "VL261-0301": "OUT1"}
"""Names of the demonstration and of the small hub of these tests."""


def examples() -> list[list[str]]:
    """Words of every call of curl on the page."""
    blocks = re.findall(r"```sh\n(.*?)```", PAGE, re.DOTALL)
    return [shlex.split(line) for block in blocks for line in block.splitlines() if line.startswith("curl ")]


def test_every_setting_is_listed() -> None:
    rows = re.findall(r"^\| `(\w+)` \| (.*?) \| (.*?) \|$", PAGE, re.MULTILINE)
    expected = []
    for name, field in ServiceSettings.model_fields.items():
        default = field.get_default(call_default_factory=True)
        expected.append((name, "none" if default is None else json.dumps(default), field.description))
    assert rows == expected


def test_the_examples_name_what_the_demonstration_sells() -> None:
    itineraries = (ROOT / "demo_network" / "itineraries.csv").read_text(encoding="utf-8")
    legs = (ROOT / "demo_network" / "legs.csv").read_text(encoding="utf-8")
    for name in list(NAMES)[1:]:
        table = itineraries if name.startswith("ORV") else legs
        assert re.search(rf"^{name},", table, re.MULTILINE)
        assert any(name in word for words in examples() for word in words)


def test_the_examples_work(store: Path) -> None:
    async def check() -> None:
        async with running(store) as service:
            asked = set()
            for words in examples():
                method, url, headers, body = "GET", "", {}, None
                rest = iter(words[1:])
                for word in rest:
                    if word == "-X":
                        method = next(rest)
                    elif word == "-H":
                        name, _, value = next(rest).partition(": ")
                        headers[name] = value.replace("TOKEN", service.token)
                    elif word == "-d":
                        body, method = next(rest), "POST" if method == "GET" else method
                    else:
                        url = word.removeprefix("http://127.0.0.1:8437")
                for theirs, ours in NAMES.items():
                    url, body = url.replace(theirs, ours), body and body.replace(theirs, ours)
                answer = await service.client.request(method, url, headers=headers, content=body)
                assert answer.status_code == 200, (words, answer.text)
                asked.add((method.lower(), url))
            description = (await service.get("/v1/openapi.json")).json()["paths"]
            patterns = {path: re.sub(r"\{.*?\}", ".+", path) for path in description}
            shown = {path for path in description for _, url in asked if re.fullmatch(patterns[path], url)}
            assert shown == set(description) - {"/v1/nights/{night}"}

    asyncio.run(check())


def test_every_reason_and_every_status_is_explained() -> None:
    first = re.findall(r"^\| `([a-z_ ]+)` \|", PAGE, re.MULTILINE)
    reasons = [reason.name.lower() for reason in Reason if reason is not Reason.NO_PASSENGERS]  # seats are 1 or more
    assert [name for name in first if name in reasons] == reasons
    statuses = get_args(get_type_hints(Health)["status"])
    assert {name for name in first if " " in name or name == "ok"} == set(statuses)
