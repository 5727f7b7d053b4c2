"""The upper bound of `optimum.bound`, in money and as a share of wealth."""

from __future__ import annotations

import numpy as np

from planner.optimum.bound import TERMS, prove
from planner.optimum.policy import OptimalPolicy
from planner.outcomes import wealth_cost
from planner.plan_record import Proof
from planner.problem import Problem


def proof(problem: Problem, policy: OptimalPolicy, n_paths: int, seed: int) -> Proof | None:
    """Prove how near the plan is to the best possible; None without savings to measure it in.

    Money is the wealth cost of giving up the gap: all accounts scaled alike by 1 - D / W0. Each term
    and the standard error are scaled alike, so that the terms add up to the share.

    Parameters
    ----------
    n_paths
        Paths of the plan on which the bound's expectation is estimated.
    seed
        A sequence of its own: the simulated futures of the plan do not share it.
    """
    if problem.wealth <= 0:
        return None
    gap = prove(problem, policy, n_paths, np.random.default_rng([seed, 1]))
    money = wealth_cost(policy.value_at_scale(problem.opening), -gap.mean, problem.wealth)
    share = money / problem.wealth
    unit = share / gap.mean if gap.mean > 0 else 0.0
    terms = zip(TERMS, gap.terms.mean(axis=0), strict=True)
    return Proof(
        gap_money=money,
        gap_share=share,
        gap_standard_error=gap.standard_error * unit,
        terms=tuple((name, float(value) * unit) for name, value in terms),
    )
