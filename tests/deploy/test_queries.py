"""The ready queries for trends find what the daemon writes: asked of real databases, save for Flux."""

import json
import re
import time
import urllib.parse
import urllib.request
from pathlib import Path

import pytest

from idlerwatch.core.payloads import line
from idlerwatch.core.values import WindowRow
from servers import influxd, victoria

__all__ = ["influxd", "victoria"]

QUERIES = Path(__file__).parents[2] / "deploy" / "queries"


def rows(start: float) -> list[WindowRow]:
    """One row of every measurement that the queries ask for, in each window."""
    leg = {"voltage": 229.0, "voltage_min": 221.0, "voltage_max": 233.0, "current": 3.0}
    fields = {
        ("leg", "l1"): leg,
        ("leg", "l2"): leg,
        ("converter", "converter"): {"voltage_unbalance_factor": 0.021},
        ("supply", "supply"): {
            "voltage": 231.0,
            "current": 12.0,
            "current_ratio": 0.3,
            "current_ratio_max": 0.4,
            "power_factor": 0.4,
            "active_energy_import": 7.2e9,
            "active_energy_import_min": 7.1e9,
            "active_energy_import_max": 7.2e9,
        },
        ("bank", "run"): {"current_ratio_max": 0.98},
        ("earthing", "converter"): {"neutral_earth_voltage": 1.8, "neutral_earth_voltage_max": 2.6},
        ("meter", "l2"): {"answering": 0.5},
        ("alarm", "leg-low/l2"): {"standing": 0.25},
    }
    return [
        WindowRow(window, start, measurement, subject, {**figures, "count": 10.0, "flagged": 0.0})
        for window in ("10s", "10min", "1h")
        for (measurement, subject), figures in fields.items()
    ]


def statements(name: str, comment: str) -> list[str]:
    """Return the queries of a file without its comments."""
    text = "\n".join(each for each in (QUERIES / name).read_text().splitlines() if not each.startswith(comment))
    return [query.strip() for query in re.split(r"\n\s*\n", text) if query.strip()]


def write(url: str, precision: str) -> None:
    body = "\n".join(line(row, "slipway", "boatshed") for row in rows(time.time() - 60.0)).encode()
    request = urllib.request.Request(  # noqa: S310
        f"{url}/api/v2/write?bucket=converter&org=workshop&precision={precision}", body
    )
    with urllib.request.urlopen(request) as answer:  # noqa: S310
        assert answer.status == 204


def test_every_influxql_query_finds_rows(influxd):
    write(influxd.v2_url, "ms")

    for query in statements("influxql.txt", "--"):
        assert "series" in json.loads(influxd.query(query))["results"][0], query


def test_every_promql_query_finds_series(victoria):
    write(victoria.url, "ms")
    urllib.request.urlopen(f"{victoria.url}/internal/force_flush").read()  # noqa: S310

    for query in statements("promql.txt", "#"):
        asked = urllib.parse.urlencode({"query": query, "step": "5m"})
        with urllib.request.urlopen(f"{victoria.url}/api/v1/query?{asked}") as answer:  # noqa: S310
            assert json.load(answer)["data"]["result"], query


@pytest.mark.parametrize("query", statements("flux.txt", "//"))
def test_every_flux_query_names_what_is_written(query):
    measurement = re.findall(r'_measurement == "(\w+)"', query)[0]
    field = re.findall(r'_field == "(\w+)"', query)[0]
    window = re.findall(r'window == "(\w+)"', query)[0]

    assert any(row.measurement == measurement and field in row.fields and row.window == window for row in rows(0.0)), (
        query
    )
