"""Metrics and health over HTTP: names, types, values, and a server that nothing can hold up."""

from __future__ import annotations

import contextlib
import http.client
import json
import re
import socket
import threading
import time
from collections.abc import Iterator
from dataclasses import fields
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from prometheus_client.openmetrics.parser import text_string_to_metric_families
from prometheus_client.parser import text_string_to_metric_families as plain_families

from streambasis import __version__
from streambasis.errors import MetricsError
from streambasis.watch import serving
from streambasis.watch.health import Health
from streambasis.watch.metrics import COUNTERS, GAUGES, PACE_SECONDS, TIMES, Pace, registry_of
from streambasis.watch.serving import MOST_CONNECTIONS, MetricsServer
from streambasis.watch.values import Endpoint
from streambasis.watch.vitals import Vitals

LOOPBACK = Endpoint("127.0.0.1", 0)
WAIT = 5.0
# what a reading is not shown as a number of its own, but in another form or by its effect
OTHERWISE = {"batches", "unkept", "unsound", "busy_since"}


def filled() -> Vitals:
    """Return readings in which no two are the same."""
    vitals = Vitals()
    for number, field in enumerate(fields(Vitals)):
        if field.name not in OTHERWISE:
            setattr(vitals, field.name, number + 3)
    vitals.sample_time, vitals.taken_at = 1000.25, 1000.5
    return vitals


def no_warning(text: str) -> None:
    """Fail: nothing is to be warned of."""
    raise AssertionError(text)


@contextlib.contextmanager
def served(vitals: Vitals, silent_after: float = 0.0) -> Iterator[MetricsServer]:
    """Serve readings on a free port."""
    health = Health(vitals, silent_after)
    with MetricsServer(LOOPBACK, registry_of(vitals, health), health, no_warning) as server:
        yield server


def port_of(server: MetricsServer) -> int:
    """Return the port that a server listens on."""
    return int(server.url.split(":")[2].split("/")[0])


def get(
    server: MetricsServer, path: str, method: str = "GET", **headers: str
) -> tuple[int, str, str]:
    """Return status, content type and body of an answer."""
    connection = http.client.HTTPConnection("127.0.0.1", port_of(server), timeout=WAIT)
    connection.request(method, path, headers=headers)
    answer = connection.getresponse()
    body = answer.read().decode()
    connection.close()
    return answer.status, answer.getheader("Content-Type", ""), body


def test_every_reading_is_shown_under_its_name() -> None:
    """Counters, gauges and times hold what the readings hold, with the types that they have."""
    vitals = filled()
    with served(vitals) as server:
        status, kind, body = get(server, "/metrics")
    assert status == 200
    assert kind.startswith("application/openmetrics-text; version=1.0.0")
    assert body.endswith("# EOF\n")
    families = {family.name: family for family in text_string_to_metric_families(body)}
    shown = {s.name: s.value for family in families.values() for s in family.samples}
    for type_, ending, readings in (
        ("counter", "_total", COUNTERS), ("gauge", "", GAUGES), ("gauge", "", TIMES)
    ):  # fmt: skip
        for name, field, _ in readings:
            assert families[f"streambasis_{name}"].type == type_
            assert shown[f"streambasis_{name}{ending}"] == getattr(vitals, field)
    assert shown["streambasis_lag_seconds"] == 0.25
    assert shown["streambasis_healthy"] == 1
    assert shown["streambasis_disk_refuses"] == 0
    assert {one.field for one in (*COUNTERS, *GAUGES, *TIMES)} | OTHERWISE == {
        field.name for field in fields(Vitals)
    }


def test_readme_lists_what_is_shown() -> None:
    """The table of README has every metric of ours, and no other."""
    with served(filled()) as server:
        body = get(server, "/metrics")[2]
    shown = {s.name for family in text_string_to_metric_families(body) for s in family.samples}
    readme = (Path(__file__).parent.parent / "README.md").read_text()
    table = readme.split("| `streambasis_...` | meaning |\n|---|---|\n")[1].split("\n\n")[0]
    names = [
        name for row in table.splitlines() for name in re.findall("`(.*?)`", row.split("|")[1])
    ]
    assert sorted(f"streambasis_{name}" for name in names) == sorted(
        name for name in shown if name.startswith("streambasis_")
    )


def test_there_is_one_series_per_name() -> None:
    """No label but that of the version, however long a run."""
    with served(filled()) as server:
        body = get(server, "/metrics")[2]
    samples = [s for family in text_string_to_metric_families(body) for s in family.samples]
    labelled = [s for s in samples if s.labels]
    assert [(s.name, s.labels) for s in labelled] == [
        ("streambasis_build_info", {"version": __version__})
    ]
    assert len({s.name for s in samples}) == len(samples)


def test_times_that_are_not_known_are_left_out() -> None:
    """A run that has taken nothing shows no time of a sample and no lag."""
    with served(Vitals()) as server:
        body = get(server, "/metrics")[2]
    assert "timestamp" not in body
    assert "lag" not in body


def test_the_older_text_format_is_given_to_those_who_want_that_alone() -> None:
    """Who accepts plain text and not OpenMetrics gets plain text."""
    with served(filled()) as server:
        _, kind, body = get(server, "/metrics", Accept="text/plain;version=0.0.4")
        assert kind.startswith("text/plain; version=")
        names = {s.name for family in plain_families(body) for s in family.samples}
        assert "streambasis_samples_total" in names
        both = "application/openmetrics-text;version=1.0.0,text/plain;version=0.0.4;q=0.5"
        assert get(server, "/metrics", Accept=both)[1].startswith("application/openmetrics-text")


def test_health_is_a_status_and_its_reasons() -> None:
    """200 and ok while all is well, 503 and sentences otherwise."""
    vitals = Vitals(taken_at=time.time() - 100)
    with served(vitals) as server:
        status, kind, body = get(server, "/healthz")
        assert (status, kind) == (200, "application/json")
        assert json.loads(body) == {"status": "ok", "reasons": []}
        vitals.unkept = "run: cannot be written (No space left on device)"
        status, _, body = get(server, "/healthz?verbose")
        assert status == 503
        assert json.loads(body) == {
            "status": "unhealthy",
            "reasons": ["disk: run: cannot be written (No space left on device)"],
        }
        assert "streambasis_healthy 0.0" in get(server, "/metrics")[2]


def test_heads_and_other_pages_are_answered() -> None:
    """HEAD gives no body, another path 404, another method 501."""
    with served(Vitals()) as server:
        assert get(server, "/healthz", "HEAD") == (200, "application/json", "")
        assert get(server, "/")[0] == 404
        assert get(server, "/metrics/../etc/passwd")[0] == 404
        assert get(server, "/metrics", "POST")[0] == 501


@pytest.fixture(scope="module")
def lasting() -> Iterator[MetricsServer]:
    """Serve all requests of a test from one server."""
    with served(filled()) as server:
        yield server


@settings(max_examples=60)
@given(data=st.binary(max_size=200) | st.binary(max_size=50).map(lambda x: b"GET /metrics " + x))
def test_any_request_is_answered_or_dropped(lasting: MetricsServer, data: bytes) -> None:
    """Whatever is sent, the server closes the connection, says nothing, and goes on serving."""
    with socket.create_connection(("127.0.0.1", port_of(lasting)), WAIT) as client:
        client.sendall(data)
        client.shutdown(socket.SHUT_WR)
        with contextlib.suppress(ConnectionError):
            while client.recv(1 << 16):
                pass
    assert get(lasting, "/healthz")[0] == 200


def test_those_who_wait_keep_nobody_out() -> None:
    """More silent connections than there is room for, and a request is answered at once."""
    with served(Vitals()) as server:
        silent = [
            socket.create_connection(("127.0.0.1", port_of(server)), WAIT)
            for _ in range(2 * MOST_CONNECTIONS)
        ]
        for _ in range(3):
            assert get(server, "/healthz")[0] == 200
        for client in silent:
            client.close()


def test_closing_ends_every_thread_and_frees_the_port() -> None:
    """Also with a connection that is open and silent; the same port can be served again at once."""
    before = threading.active_count()
    with served(Vitals()) as server:
        endpoint = Endpoint("127.0.0.1", port_of(server))
        client = socket.create_connection(endpoint, WAIT)
        get(server, "/healthz")
    client.close()
    assert threading.active_count() == before
    health = Health(Vitals())
    with MetricsServer(endpoint, registry_of(Vitals(), health), health, no_warning) as server:
        assert get(server, "/healthz")[0] == 200


def test_an_address_that_is_taken_is_named() -> None:
    """One line with the address and the reason."""
    health = Health(Vitals())
    with served(Vitals()) as server:
        taken = Endpoint("127.0.0.1", port_of(server))
        with pytest.raises(MetricsError, match=f"metrics {taken}: .*Address already in use"):
            MetricsServer(taken, registry_of(Vitals(), health), health, no_warning)
    with pytest.raises(MetricsError, match=r"no\.such\.host\.invalid:1"):
        MetricsServer(
            Endpoint("no.such.host.invalid", 1), registry_of(Vitals(), health), health, no_warning
        )


@pytest.mark.parametrize(
    ("host", "loopback"), [("127.0.0.1", True), ("localhost", True), ("0.0.0.0", False)]
)
def test_who_can_reach_it_is_known(host: str, loopback: bool) -> None:
    """The loopback address by number or by name, and every other."""
    health = Health(Vitals())
    endpoint = Endpoint(host, 0)
    with MetricsServer(endpoint, registry_of(Vitals(), health), health, no_warning) as server:
        assert server.loopback is loopback


def test_an_error_of_ours_is_warned_of(monkeypatch: pytest.MonkeyPatch) -> None:
    """A page that cannot be made is one warning; the server goes on."""

    def fail(*_: object) -> bytes:
        raise RuntimeError("odd")

    warnings: list[str] = []
    health = Health(Vitals())
    registry = registry_of(Vitals(), health)
    with MetricsServer(LOOPBACK, registry, health, warnings.append) as server:
        with monkeypatch.context() as patch:
            patch.setattr(serving, "openmetrics", fail)
            with pytest.raises(http.client.HTTPException):
                get(server, "/metrics")
        assert get(server, "/metrics")[0] == 200
    assert warnings == ["metrics: RuntimeError: odd"]


def test_pace_is_that_of_the_last_seconds() -> None:
    """Of a steady feed the rate is exact at every look; after a stop it falls to zero."""
    pace = Pace(100.0)
    for second in range(1, 100):
        assert pace.at(100.0 + second, 50 * second) == 50.0
    assert pace.at(100.0 + 99 + PACE_SECONDS, 50 * 99) == 0.0


def test_pace_does_not_depend_on_how_many_ask() -> None:
    """A second scraper right behind the first gets the same rate, not that of a moment."""
    pace = Pace(0.0)
    for second in range(1, 60):
        count = 1000 * second
        assert pace.at(float(second), count) == pytest.approx(1000.0)
        assert pace.at(second + 0.001, count) == pytest.approx(1000.0, rel=0.01)


def test_pace_is_never_negative() -> None:
    """A run that went back to its last commit has fewer samples than it had."""
    pace = Pace(0.0)
    pace.at(2.0, 1000)
    assert pace.at(15.0, 900) == 0.0
