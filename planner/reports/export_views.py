"""Comparisons, stresses, searches, ladders and snapshots for other programs: plain data with stable keys."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from planner.decisions import DecisionCurve
from planner.history import SequenceResult, Sequences
from planner.ladders import Rung
from planner.plan_record import StrategyResult
from planner.reports import export
from planner.reports.export import Json, money, share
from planner.snapshot import ONE_OFF, Snapshot
from planner.surprises import StressResult


def strategy_json(result: StrategyResult, later: Sequence[tuple[int, int]]) -> Json:
    """One strategy, with low, middle and high spending at later ages (age, year t)."""
    return export.strategy_json(result) | {
        "spending_later": [
            {"age": age}
            | {
                name: money(float(v))
                for name, v in zip(("p10", "p50", "p90"), result.spending[:, t], strict=True)
            }
            for age, t in later
        ],
        "reason": result.reason,
    }


def stress_json(stress: StressResult, later: Sequence[tuple[int, int]]) -> Json:
    """One stress; `as_bad_as_losing` is None where lives or futures are chosen."""
    result = stress.result
    return {
        "name": stress.name,
        "how": stress.how,
        "as_bad_as_losing": money(result.wealth_cost) if stress.comparable else None,
        "strategy": {
            key: value
            for key, value in strategy_json(result, later).items()
            if not key.startswith("wealth_cost")
        },
    }


def decision_json(curve: DecisionCurve) -> Json:
    """One decision: its candidates, the place of the best, and notes."""
    return {
        "key": curve.key,
        "question": curve.question,
        "best": curve.best,
        "points": [
            {
                "choice": point.label,
                "as_given": point.as_given,
                "spending_this_year": money(point.spending_this_year),
                "steady": money(point.steady),
                "worth": money(point.worth),
                "break_even_age": share(point.break_even_age),
            }
            for point in curve.points
        ],
        "notes": list(curve.notes),
    }


def sequences_json(sequences: Sequences) -> Json:
    """Every strategy through every start year."""
    return {
        "years": sequences.years,
        "strategies": [_sequence_json(result) for result in sequences.results],
    }


def _sequence_json(result: SequenceResult) -> Json:
    order = result.order
    return {
        "key": result.key,
        "name": result.name,
        "worst_start": result.starts[int(order[0])],
        "middle_start": result.starts[int(order[len(order) // 2])],
        "starts": [
            {
                "year": year,
                "lowest": money(float(result.lowest[i])),
                "average": money(float(result.average[i])),
                "years_below_essential": int(np.rint(result.years_below[i])),
                "left": money(float(result.left[i])),
            }
            for i, year in enumerate(result.starts)
        ],
    }


def rung_json(rung: Rung) -> Json:
    """One rung of a ladder of preferences."""
    return {
        "value": share(rung.value),
        "as_given": rung.as_given,
        "spending_this_year": money(rung.spending_this_year),
        "age": rung.age,
        "spending_then": {"p10": money(rung.bad_case), "p50": money(rung.middle_case)},
        "portfolio": rung.portfolio,
        "chance_below_essential": share(rung.chance_below_essential),
        "estate": {
            "p10": money(rung.estate.p10),
            "p50": money(rung.estate.p50),
            "p90": money(rung.estate.p90),
        },
    }


def snapshot_json(shot: Snapshot) -> Json:
    """The same numbers for other programs; stable keys."""
    wanted, now = shot.wanted, shot.now
    room = now.room_to_next_threshold
    return {
        "client": shot.household.client_name,
        "plan_date": shot.household.plan_date.isoformat(),
        "currency": shot.household.currency,
        "savings": money(shot.savings),
        "bills_covered": [{"who": c.who, "share": share(c.share)} for c in shot.covered],
        "wanted_spending": None
        if wanted is None
        else {
            "wanted": money(wanted.wanted),
            "paid_for_life": share(wanted.paid_for_life),
            "lasts_to_age_low": wanted.age_low,
            "lasts_to_age_middle": wanted.age_middle,
            "needed_return": share(wanted.needed_return),
            "held_return": share(wanted.held_return),
            "needed_to_age": wanted.lasts_to,
        },
        "spending_this_year": money(now.spending),
        "fall_before_bills_are_cut": share(shot.fall_before_cut),
        "one_off": {
            "amount": money(ONE_OFF),
            "a_year_for_life": money(shot.one_off_a_year),
            "this_year": money(shot.one_off_this_year),
        },
        "tax": {
            "amount": money(now.tax),
            "share_of_income": share(shot.tax_share),
            "rate_on_next": share(shot.next_rate),
            "room_to_next_threshold": money(room) if math.isfinite(room) else None,
        },
        "still_due": [
            {
                "account": account.account,
                "minimum_distribution": money(account.minimum_distribution),
                "still_due": money(account.still_due),
            }
            for account in now.accounts
            if account.minimum_distribution > 0
        ],
        "survivors": [
            {
                "survivor": s.name,
                "income": money(s.income),
                "after_tax": money(s.after_tax),
                "essential": money(s.essential),
            }
            for s in shot.survivors
        ],
        "left_for_family": [
            {"age": age, "p10": money(left.p10), "p50": money(left.p50), "p90": money(left.p90)}
            for age, left in shot.family
        ],
        "costs": {name: money(cost) for name, cost in shot.costs},
    }
