"""A small campaign and a short week; the large ones are scripts (see DEVELOPERS.md, "Faults")."""

from __future__ import annotations

from typing import Any


def test_a_small_campaign_has_nothing_wrong(campaign: Any) -> None:
    mixes = (campaign.RECOVERABLE, campaign.RECOVERABLE + campaign.GRAVE)
    ended = [campaign.one((number, 41, mixes[number % 2])) for number in range(12)]
    assert {run.number: run.wrong for run in ended if run.wrong} == {}
    recoverable = [run for run in ended if run.recoverable]
    assert sum(run.end_points > 0 for run in recoverable) >= 0.8 * len(recoverable)


def test_runs_without_faults_carry_no_warning(campaign: Any) -> None:
    ended = [campaign.one((number, 42, None)) for number in range(5)]
    assert [run.wrong for run in ended if run.wrong] == []
    assert sum(bool(run.warnings) for run in ended) <= 1
    assert all(run.end_points for run in ended)


def test_a_run_of_the_campaign_comes_out_the_same_again(campaign: Any) -> None:
    job = (7, 43, campaign.RECOVERABLE)
    first, again = campaign.one(job), campaign.one(job)
    assert (first.outcome, first.off_u, first.duration_s) == (again.outcome, again.off_u, again.duration_s)


def test_memory_and_handles_do_not_grow(week: Any) -> None:
    done = week.week(1.0, seed=44, settled_h=0.4, change_s=500.0, traced=True)
    assert done.said == []
    assert done.runs >= 4
    assert done.grown_mb < week.LARGEST_GROWTH_MB
    assert done.grown_handles <= 0
