"""Every request of every shipped dialect is understood by the personality of its name."""

from __future__ import annotations

import tomllib
from collections.abc import Iterator
from importlib import resources

import pytest

from instruments.simulated.server import PERSONALITIES, personality
from tests.instruments.simulated_fake import WITH_BLEEDER, WITH_SWITCH, Bench, bench_file

NAMES = [name for kind in PERSONALITIES.values() for name in kind]
PLAIN = {"supply": "supply-plain", "meter": "meter-scan", "load": "load-plain"}
CHANNELS = {"supply": "1", "switch": "301"}


def requests(table: object) -> Iterator[str]:
    if isinstance(table, dict):
        for value in table.values():
            yield from requests(value)
    elif isinstance(table, str) and table.startswith((":", "*")):
        yield table


@pytest.mark.parametrize("name", NAMES)
def test_requests_are_understood(name: str) -> None:
    kind = name.partition("-")[0]
    text = (resources.files("instruments.dialects") / f"{name}.toml").read_text(encoding="utf-8")
    swap = (f'"{PLAIN.get(kind, name)}"', f'"{name}"')
    bench = Bench(bench_file(WITH_SWITCH, WITH_BLEEDER, swap))
    values = {"value": 1, "range": 1, "nplc": 1, "scans": 3, "interval": 0.1, "routes": "101,102"}
    channel = CHANNELS.get(kind, "101")
    sent = list(requests(tomllib.loads(text)))
    assert sent
    for request in sent:
        message = request.format(channel=channel, **values)
        bench.devices[kind].execute(message)
        assert bench.devices[kind].errors.pop() == '0,"No error"', message


@pytest.mark.parametrize(
    ("kind", "dialect", "chosen"),
    [
        ("supply", "supply-select", "supply-select"),
        ("supply", "mine.toml", "supply-plain"),
        ("supply", "dialects/our-supply-list-v2.toml", "supply-list"),
        ("supply", "supply-list/mine.toml", "supply-plain"),
        ("meter", "mine.toml", "meter-single"),
        ("load", "mine.toml", "load-plain"),
        ("switch", "mine.toml", "switch-plain"),
    ],
)
def test_personality_of_a_dialect(kind: str, dialect: str, chosen: str) -> None:
    assert personality(kind, dialect) == chosen


def test_a_meter_with_routes_is_a_scanner() -> None:
    assert personality("meter", "mine.toml", scanning=True) == "meter-scan"
