"""Right and wrong answers to the closed-form problem, made once for all checkers."""

from functools import cache

import numpy as np

from emu.problem import Problem
from tests.reference.toy import ExactEstimator, ToyCampaign, ToyModel
from training.checks.answers import answer_held_out
from training.checks.calibration import check_calibration

PROBLEM = Problem(ToyModel(), ToyCampaign())
ESTIMATORS = {
    "right": ExactEstimator(PROBLEM),
    "too wide": ExactEstimator(PROBLEM, widen=1.4),
    "too narrow": ExactEstimator(PROBLEM, widen=0.7),
    "shifted": ExactEstimator(PROBLEM, shift=0.7),
}
WRONG = ("too wide", "too narrow", "shifted")


@cache
def answers(kind: str):
    """Let an estimator answer 400 held-out flares."""
    return answer_held_out(ESTIMATORS[kind], PROBLEM, cases=400, draws=200, seed=11)


@cache
def calibration(kind: str):
    """Check the answers."""
    return check_calibration(answers(kind), PROBLEM, level=0.99, seed=2)


def deviations(kind: str):
    """Return the posterior's standard deviation over the exact one: mean over flares (P,)."""
    return answers(kind).theta.std(axis=1).mean(axis=0) / answers("right").theta.std(axis=1).mean(axis=0)


def generator():
    """Return a generator with a fixed seed."""
    return np.random.default_rng(3)
