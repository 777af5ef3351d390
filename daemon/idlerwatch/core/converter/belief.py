"""Which hypothesis is believed, sample after sample: Bayes' rule with forgetting, and with a bound.

What the model leaves out is the same in every sample of a steady load, so a steady load is evidence once, not once a
second. The evidence of each hypothesis therefore follows the log-likelihood of the newest sample by a third of the
distance (exponential forgetting): after many alike samples it is that of one, and no single sample decides. Each
sample's log-likelihood ratio counts up to `BOUND`, so that three clear samples decide, and so that a change is noticed
within six whatever was believed before. What evidence there is besides the circuit (an auxiliary contact, the coil)
is added to the sample's log-likelihood before that.

References
----------
A. Wald, Sequential Tests of Statistical Hypotheses, 1945 (the bound); R. Kulhavy and M. Zarrop, On a general concept
of forgetting, 1993.
"""

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np

from idlerwatch.core.converter.circuit import Floats

FOLLOWS: Final = 1.0 / 3.0
"""Share of the distance to the newest sample's evidence that is gone each sample."""
BOUND: Final = 12.0
"""What one sample's log-likelihood ratio counts at most: three such samples give odds of e^8.4, beyond 1000 to 1."""
SURE: Final = 0.999
"""Probability from which on something is decided."""


@dataclass(frozen=True, slots=True)
class Belief:
    """Evidence of each hypothesis (h,), natural logarithms up to a constant, and how many samples it rests on."""

    evidence: Floats
    samples: int = 0


def begin_belief(hypotheses: int) -> Belief:
    """Return the belief before the first sample: no evidence at all."""
    return Belief(np.zeros(hypotheses))


def believe(belief: Belief, log_likelihood: Floats) -> Belief:
    """Return the belief after one sample's log-likelihoods (h,); one that is missing changes nothing.

    Examples
    --------
    >>> belief = begin_belief(2)
    >>> for _ in range(3):
    ...     belief = believe(belief, np.array([0.0, -500.0]))
    >>> bool(probabilities(belief, np.ones(2))[0] > SURE)
    True
    """
    if np.isnan(log_likelihood).any():
        return belief
    ratio = np.maximum(log_likelihood - log_likelihood.max(), -BOUND)
    return Belief(belief.evidence + FOLLOWS * (ratio - belief.evidence), belief.samples + 1)


def probabilities(belief: Belief, weights: Floats) -> Floats:
    """Return the probability of each hypothesis, `weights` (h,) what each is believed beforehand."""
    odds = weights * np.exp(belief.evidence - belief.evidence.max())
    share: Floats = odds / odds.sum()
    return share


def probability_of(holds: Callable[[int], bool], shares: Floats) -> float:
    """Return the probability of all hypotheses (by number) for which something holds."""
    return math.fsum(share for number, share in enumerate(shares.tolist()) if holds(number))


def decided(shares: Sequence[float]) -> int | None:
    """Return which of several exclusive things is decided; None while none is."""
    best = max(range(len(shares)), key=shares.__getitem__)
    return best if shares[best] > SURE else None
