"""Results kept by key: bounded in number and in bytes, never the last one of a step."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pytest

from meseta.analysis.kept import KeptResults, array_owners


@dataclass(frozen=True)
class Result:
    values: np.ndarray
    parts: tuple[np.ndarray, ...] = ()


def megabytes(number: float) -> Result:
    return Result(np.zeros(int(number * 1e6), np.uint8))


def test_the_last_eight_of_a_step_are_kept() -> None:
    kept = KeptResults()
    for key in range(10):
        kept.put("one", str(key), megabytes(0.001))
    assert [kept.get("one", str(key)) is not None for key in range(10)] == [False, False] + [True] * 8


def test_large_results_make_room_for_newer_ones() -> None:
    kept = KeptResults(most_bytes=10_000_000)
    for key in range(4):
        kept.put("large", str(key), megabytes(4))
    assert [kept.get("large", str(key)) is not None for key in range(4)] == [False, False, True, True]
    # what was used last stays
    kept.get("large", "2")
    kept.put("large", "4", megabytes(4))
    assert [kept.get("large", key) is not None for key in ("2", "3", "4")] == [True, False, True]


def test_the_only_result_of_a_step_stays_whatever_its_size() -> None:
    kept = KeptResults(most_bytes=1000)
    kept.put("one", "a", megabytes(1))
    kept.put("other", "a", megabytes(1))
    assert kept.get("one", "a") is not None
    assert kept.get("other", "a") is not None


def test_memory_that_results_share_counts_once_and_files_not_at_all(tmp_path) -> None:
    base = np.zeros(5_000_000, np.uint8)
    kept = KeptResults(most_bytes=8_000_000)
    for key in range(5):
        kept.put("views", str(key), Result(base[key:], (base[:10],)))
    assert all(kept.get("views", str(key)) is not None for key in range(5))
    mapped = np.memmap(tmp_path / "rows", np.uint8, "w+", shape=(100_000,))
    assert list(array_owners(Result(np.asarray(mapped)[5:]))) == []
    assert sum(dict(array_owners(Result(base[1:], (base,)))).values()) == pytest.approx(5_000_000)
