"""Metrics scraped from a real crew under load, held against the ledger and the callers' books."""

from __future__ import annotations

import signal
from collections import Counter
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import httpx
import pytest
from prometheus_client.parser import text_string_to_metric_families

from service.commands.server_process import free_port, is_ready
from tests.commands.crews import NAME, PRICE, Serving, crew, until

on_postgresql = pytest.mark.parametrize("backend", ["postgresql"], indirect=True)
CALLERS = 4
BIDS_EACH = 60
Samples = dict[tuple[str, tuple[str, ...]], float]


def scrape(address: str) -> Samples:
    """Every sample by name and values of labels, these in the order of their names."""
    answer = httpx.get(f"{address}/metrics")
    assert answer.status_code == 200, answer.text
    return {
        (sample.name, tuple(value for _, value in sorted(sample.labels.items()))): sample.value
        for family in text_string_to_metric_families(answer.text)
        for sample in family.samples
    }


def trade(serving: Serving) -> Counter[str]:
    """Bid, win every second one, lose the rest, repeat some; what the caller itself counted."""
    seen: Counter[str] = Counter()
    with serving.caller() as client:
        for number in range(BIDS_EACH):
            answer = client.post("/v1/bids", json={"line_item": NAME}).json()
            seen["bids" if answer["pass"] is None else answer["pass"]] += 1
            if answer["pass"] is not None:
                continue
            row = {"ticket": answer["ticket"], "kind": "lost"}
            if number % 2:
                row |= {"kind": "won", "clearing_cpm": 1.5}
            again = [row, row] if number % 5 == 0 else [row]
            for body in again:
                told = client.post("/v1/outcomes", json={"outcomes": [body]})
                assert told.status_code == 200, told.text
                seen[f"{row['kind']} {told.json()['results'][0]['status']}"] += 1
    return seen


@on_postgresql
def test_what_is_scraped_adds_up_to_the_ledger(migrated_url: str, tmp_path: Path) -> None:
    """Whichever worker is asked, and though one is killed on the way, nothing is missing."""
    port = free_port()
    inside = f"http://127.0.0.1:{port}"
    with crew(migrated_url, tmp_path, 3, metrics_port=str(port)) as serving:
        serving.create()
        serving.everybody(3)
        warm = serving.asked
        with ThreadPoolExecutor(CALLERS) as pool:
            books = sum(pool.map(lambda _: trade(serving), range(CALLERS)), Counter())
        # Its numbers lie in memory that is not its own, so they outlive it.
        serving.children("worker")[0].send_signal(signal.SIGKILL)
        until(lambda: len(serving.children("worker")) == 3 and is_ready(serving.server.port))
        with ThreadPoolExecutor(CALLERS) as pool:
            books += sum(pool.map(lambda _: trade(serving), range(CALLERS)), Counter())
        spent = serving.one("SELECT spent FROM balance")

        def told() -> Samples | None:
            seen = scrape(inside)
            # The clerk reads every few seconds, and before its first look there is no money.
            euros = seen.get(("bidkeel_money_spent", ("EUR",)), 0.0)
            return seen if round(euros * 10**9) == spent else None

        seen = until(told)
        won = serving.one("SELECT count(*) FROM stream WHERE kind = 'won'")
        assert seen[("bidkeel_bids_total", ())] == books["bids"] + warm
        assert won == books["won recorded"] > 100
        assert spent == won * PRICE * 3 // 4
        for kind in ("won", "lost"):
            for status in ("recorded", "duplicate"):
                name = ("bidkeel_outcomes_total", (kind, status))
                assert seen[name] == books[f"{kind} {status}"] > 0, name
        passed = sum(value for name, value in seen.items() if name[0] == "bidkeel_passes_total")
        answers = seen[("bidkeel_bids_total", ())] + passed
        assert seen[("bidkeel_bid_duration_seconds_count", ())] == answers
        assert seen[("bidkeel_live_workers", ())] >= 3
        assert seen[("bidkeel_process_memory_bytes", ("clerk",))] > 10**7
        # Asked again, by whichever worker takes the call, the sums are the same.
        again = [scrape(inside) for _ in range(6)]
        assert {one[("bidkeel_outcomes_total", ("won", "recorded"))] for one in again} == {won}


@pytest.mark.parametrize("backend", ["sqlite"], indirect=True)
def test_metrics_may_have_a_port_of_their_own(migrated_url: str, tmp_path: Path) -> None:
    """There they are told; to whoever reaches the other port they do not exist."""
    port = free_port()
    with crew(migrated_url, tmp_path, 1, metrics_port=str(port)) as serving:
        outside = httpx.get(f"{serving.server.address}/metrics")
        assert (outside.status_code, outside.json()["code"]) == (404, "not_found")
        assert ("bidkeel_bids_total", ()) in scrape(f"http://127.0.0.1:{port}")
