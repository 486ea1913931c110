"""The verdict: accept, reject or inconclusive, as an equivalence test, and what it would take to settle it."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from statistics import NormalDist
from typing import Protocol

from scipy import optimize, special

from anneal_ref.base.checks import integer, number, positive
from anneal_ref.base.errors import InputError
from anneal_ref.judgement.squared_distance import SquaredDistance

POWER = 0.8
"""Chance with which the predicted number of shots settles an inconclusive verdict."""

MOST = 1e4
"""Factor on the shots beyond which no number is named."""

_TRUTH_LIMITS = (
    "no number of shots would settle it: the truth's own numerical error covers the distance from the limit; "
    "refine the reference"
)
_normal = NormalDist().inv_cdf


@dataclass(frozen=True, slots=True)
class Acceptance:
    """The limits that a processor must meet.

    Parameters
    ----------
    correlation_error : float
        Largest allowed correlation error.
    residual_energy, order_parameter : float, optional
        Largest allowed distance of the residual energy per spin (units of J) and of the order parameter q2 from
        the truth.
    magnetisation_error : float, optional
        Largest allowed root mean square over sites of (measured <Z> - true <Z>). With fields the correlation error is
        that of connected correlations, which do not see <Z>; an instance with fields is therefore always held
        against a limit on <Z> too, by default the one on the correlation error. Without fields <Z> vanishes by
        symmetry and has no limit.
    level : float
        Confidence of each verdict, between 0.5 and 1: a processor exactly at a limit is accepted, and is rejected,
        with a chance of at most 1 - level.
    """

    correlation_error: float
    residual_energy: float | None = None
    order_parameter: float | None = None
    level: float = 0.95
    magnetisation_error: float | None = None

    def __post_init__(self) -> None:
        """Check the limits."""
        for name in ("correlation_error", "magnetisation_error", "residual_energy", "order_parameter"):
            value = getattr(self, name)
            if value is not None or name == "correlation_error":
                object.__setattr__(self, name, positive(name, value))
        level = number("level", self.level, 0.5, 1.0)
        if level in (0.5, 1.0):
            raise InputError(f"level must lie strictly between 0.5 and 1; got {level}")

    def limits(self, fields: bool) -> dict[str, float]:
        """Return the limits that hold for instances with or without fields, by name."""
        magnetisation = self.correlation_error if self.magnetisation_error is None else self.magnetisation_error
        named = {
            "correlation_error": self.correlation_error,
            "magnetisation_error": magnetisation if fields else None,
            "residual_energy": self.residual_energy,
            "order_parameter": self.order_parameter,
        }
        return {name: limit for name, limit in named.items() if limit is not None}


@dataclass(frozen=True, slots=True)
class Finding:
    """The outcome for one limit.

    Parameters
    ----------
    name : str
    limit : float
    low, high : float
        One-sided bounds on the quantity that the limit is for; accept if high <= limit, reject if low > limit.
    outcome : {"accept", "reject", "inconclusive"}
    more_shots : int or None
        How many further shots would settle an inconclusive outcome, with a chance of 80 % if the measured value is
        the true one; None where it is settled, or where no number would.
    advice : str
        What would settle it, in words; empty where it is settled.
    """

    name: str
    limit: float
    low: float
    high: float
    outcome: str
    more_shots: int | None = None
    advice: str = ""

    def __str__(self) -> str:
        """Return the finding on one line."""
        text = f"{self.name}: {self.outcome} (between {self.low:.4g} and {self.high:.4g}, limit {self.limit:g})"
        return text + (f"; {self.advice}" if self.advice else "")


@dataclass(frozen=True, slots=True)
class Decision:
    """The verdict over all limits: accept if all accept, reject if any rejects, else inconclusive.

    Accepting takes every test, so each may have the full error probability; rejecting takes only one, so the
    error probability is divided among them.
    """

    findings: tuple[Finding, ...]
    level: float

    @property
    def outcome(self) -> str:
        """Accept, reject or inconclusive."""
        outcomes = [finding.outcome for finding in self.findings]
        if "reject" in outcomes:
            return "reject"
        return "accept" if all(outcome == "accept" for outcome in outcomes) else "inconclusive"

    @property
    def more_shots(self) -> int | None:
        """Further shots that would settle all open findings, or None if there are none open or no number would."""
        needed = [finding.more_shots for finding in self.findings if finding.outcome == "inconclusive"]
        return max((n for n in needed if n is not None), default=None) if None not in needed else None

    def __str__(self) -> str:
        """Return outcome and findings, a line each."""
        return "\n".join([f"verdict: {self.outcome} (level {self.level:.0%})", *(f"  {one}" for one in self.findings)])


def outcome_of(low: float, high: float, limit: float) -> str:
    """Return accept if high <= limit, reject if low > limit, else inconclusive."""
    if high <= limit:
        return "accept"
    return "reject" if low > limit else "inconclusive"


class SquareRoot(Protocol):
    """An error that is the root of a squared distance: of correlations, or of magnetisations."""

    @property
    def distance(self) -> SquaredDistance:
        """The squared distance behind it."""

    @property
    def num(self) -> float:
        """The truth's numerical error."""

    def lower(self, level: float) -> float:
        """Return a one-sided lower bound."""

    def upper(self, level: float) -> float:
        """Return a one-sided upper bound."""

    def edges(self, limit: float) -> tuple[float, float]:
        """Return the squared distances that accept up to, and reject from."""


def judge_error(
    name: str,
    error: SquareRoot,
    limit: float,
    shots: int,
    acceptance_level: float = 0.95,
    tests: int = 1,
    unit: str = "shots",
) -> Finding:
    """Hold a correlation or magnetisation error against its limit.

    Parameters
    ----------
    name : str
    error : CorrelationError or MagnetisationError
    limit : float
    shots : int
        Number of shots behind it, for the prediction.
    acceptance_level : float
        Level of the verdict.
    tests : int
        Number of limits that could each reject.
    unit : str
        What further shots must be: "shots", or "shots in new gauges or batches" where shots come in groups.
    """
    low, high = error.lower(1 - (1 - acceptance_level) / tests), error.upper(acceptance_level)
    outcome = outcome_of(low, high, limit)
    if outcome != "inconclusive":
        return Finding(name, limit, low, high, outcome)
    present = max(error.distance.value, 0.0)
    accepting, rejecting = error.edges(limit)

    def margin(edge: float, alpha: float) -> Callable[[float], float]:
        reserve, freedom = _normal(POWER), error.distance.freedom
        # the tail that bounds have, with the clusters that there would be then
        return lambda more: (
            abs(present - edge)
            - float(special.stdtrit(freedom * more / 2, 1 - alpha)) * math.sqrt(error.distance.variance(edge, more))
            - reserve * math.sqrt(error.distance.variance(present, more))
        )

    alpha = 1 - acceptance_level
    if error.num > 0 and accepting <= present <= rejecting:
        return Finding(name, limit, low, high, outcome, None, _TRUTH_LIMITS)
    side = margin(accepting, alpha) if present < accepting else margin(rejecting, alpha / tests)
    more_shots, advice = _needed(side, shots, unit)
    return Finding(name, limit, low, high, outcome, more_shots, advice)


def judge_distance(
    name: str,
    difference: float,
    stat: float,
    num: float,
    limit: float,
    shots: int,
    acceptance_level: float = 0.95,
    tests: int = 1,
    quantile: Callable[[float], float] = _normal,
    unit: str = "shots",
) -> Finding:
    """Hold the distance between a measured and a true number against its limit (two one-sided tests).

    Parameters
    ----------
    name : str
    difference, stat, num : float
        Measured minus true, its standard error, and the truth's numerical error.
    limit : float
        Largest allowed distance.
    shots, acceptance_level, tests, unit
        As in `judge_error`.
    quantile : callable
        Quantile function of difference/stat; the normal one, or Student's where few clusters stand behind `stat`.

    References
    ----------
    D. J. Schuirmann, J. Pharmacokinet. Biopharm. 15, 657 (1987): two one-sided tests.
    """
    alpha = 1 - acceptance_level
    distance = abs(difference)
    low = max(distance - quantile(1 - alpha / tests) * stat - num, 0.0)
    high = distance + quantile(acceptance_level) * stat + num
    outcome = outcome_of(low, high, limit)
    if outcome != "inconclusive":
        return Finding(name, limit, low, high, outcome)
    room = abs(distance - limit) - num
    if room <= 0:
        return Finding(name, limit, low, high, outcome, None, _TRUTH_LIMITS)
    # the quantile of today's clusters, so that few of them are not promised too much
    need = quantile(acceptance_level if distance < limit else 1 - alpha / tests) + _normal(POWER)
    more_shots, advice = _needed(lambda more: room - need * stat / math.sqrt(more), shots, unit)
    return Finding(name, limit, low, high, outcome, more_shots, advice)


def decide(findings: Sequence[Finding], level: float) -> Decision:
    """Return the verdict over all limits."""
    if not findings:
        raise InputError("a verdict takes at least one finding; got none")
    return Decision(tuple(findings), level)


def _needed(margin: Callable[[float], float], shots: int, unit: str) -> tuple[int | None, str]:
    """Further shots at which a margin, which grows with the factor on the data, becomes positive."""
    shots = integer("shots", shots, low=1)
    if margin(MOST) < 0:
        return None, f"the measured value lies so near the limit that even {MOST:g} times the shots would not settle it"
    if margin(1.0) >= 0:
        factor = 1.0
    else:
        factor = math.exp(optimize.brentq(lambda x: margin(math.exp(x)), 0.0, math.log(MOST)))
    # a factor of 1 means that this outcome was bad luck; the same again is the least that can change it
    more = max(shots * (factor - 1.0), 0.25 * shots)
    digits = max(0, int(math.floor(math.log10(more))) - 1)
    rounded = int(math.ceil(more / 10**digits)) * 10**digits
    return rounded, f"about {rounded} more {unit} would settle it (chance {POWER:.0%} if the measured value is right)"
