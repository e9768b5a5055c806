"""Checks of one equation, taken alone, before anything is sampled."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
import scipy.special
from numpy.typing import NDArray

from bayes_sys.classical import alone as statistics
from bayes_sys.classical.alone import Alone, fit_alone
from bayes_sys.classical.check import FINE, NOTE, WARNING, Check, counted, number, p_value
from bayes_sys.study.periods import Periods
from bayes_sys.system.system import Equation, System

Array = NDArray[np.float64]

PERIODS_PER_COEFFICIENT = 5.0
"""Common practice: fewer observations per coefficient leave estimates that hang on single periods."""

CONDITION = 30.0
"""Belsley, Kuh and Welsch (1980, chapter 3): from here on collinearity starts to matter."""

DIGITS_LOST = 1e8
"""A condition number beyond this costs half the digits of double precision."""

INFLATION, SEVERE_INFLATION = 10.0, 100.0
"""Marquardt (1970): above ten; common practice since. A hundred: the standard error is ten times larger."""

LEVEL, STRICT_LEVEL = 0.05, 0.01
"""A test below the first is a note, below the second a warning: one study makes many tests."""

EXACT = 1e-6
"""Residuals that are this small beside the response's spread are no errors any more."""

HIGH_LEVERAGE = 3.0
"""Times the mean leverage p / T (Hoaglin and Welsch 1978 name twice; in short series that is the rule)."""

COOK = 1.0
"""Cook and Weisberg (1982, section 3.5): leaving the period out moves the estimate by about its own error."""

SEASONAL_ORDERS = {"quarter": 4, "month": 12}


def equation_checks(system: System, index: int) -> Iterator[Check]:
    """Yield the checks of one equation.

    Parameters
    ----------
    system : System
    index : int
        Position of the equation.
    """
    equation, response = system.equations[index], system.responses[:, index]
    yield _periods(equation, system.n_periods)
    alone = fit_alone(equation.design, response, has_intercept=equation.has_intercept)
    if alone is None:
        if len(equation.regressors) < system.n_periods:
            yield _cannot_tell_apart(equation)
        return
    if equation.regressors:
        yield from _collinearity(equation, alone)
    exact = _exact_fit(equation, alone, response)
    yield exact
    if exact.verdict != FINE:
        return
    yield _durbin_watson(equation, alone, response, system.periods)
    yield _breusch_godfrey(equation, alone, system.periods)
    if len(equation.regressors) > equation.has_intercept:
        yield _heteroskedasticity(equation, alone)
    if equation.regressors:
        yield from _influence(equation, alone, system.periods)


def _periods(equation: Equation, n_periods: int) -> Check:
    p = len(equation.regressors)
    figure = n_periods / p if p else None
    have = f"{counted(n_periods, 'period')} for {counted(p, 'coefficient')}"
    if n_periods <= p:
        verdict = WARNING
        then = (
            ": the data alone cannot determine this equation. Least squares has no answer; the "
            "posterior exists, but much of it comes from the prior."
        )
    elif figure is not None and figure < PERIODS_PER_COEFFICIENT:
        verdict = NOTE
        then = (
            f". That is fewer than {PERIODS_PER_COEFFICIENT:.0f} per coefficient (common practice "
            "asks for more): single periods weigh heavily, and so does the prior."
        )
    else:
        verdict = FINE
        then = ": enough to estimate each of them."
    return Check("periods", equation.name, figure, PERIODS_PER_COEFFICIENT, verdict, have + then)


def _cannot_tell_apart(equation: Equation) -> Check:
    sentence = (
        "One regressor is an exact combination of the others (the intercept counts as one), so the data "
        "cannot tell their effects apart; only the prior does. Drop one."
    )
    return Check("condition_number", equation.name, None, CONDITION, WARNING, sentence)


def _collinearity(equation: Equation, alone: Alone) -> Iterator[Check]:
    figure = statistics.condition_number(alone.design)
    if figure <= CONDITION:
        verdict = FINE
        sentence = "The regressors are clearly distinct from one another."
    elif figure <= DIGITS_LOST:
        verdict = NOTE
        sentence = (
            "Some regressors (the intercept counts as one) move almost together. If it is only "
            "that a regressor varies little around a large level, the slopes are not affected; see "
            "the variance inflation."
        )
    else:
        verdict = WARNING
        sentence = (
            "The regressors are on such different scales, or so nearly the same, that computations "
            "lose half of their digits. Centre or rescale them, or drop one."
        )
    yield Check("condition_number", equation.name, figure, CONDITION, verdict, sentence)
    inflation = statistics.variance_inflation(alone)
    if len(inflation):
        yield _inflation(equation, inflation)


def _inflation(equation: Equation, inflation: Array) -> Check:
    worst = int(np.argmax(inflation))
    figure = float(inflation[worst])
    name = equation.regressors[worst + equation.has_intercept]
    verdict = FINE if figure <= INFLATION else NOTE if figure <= SEVERE_INFLATION else WARNING
    wider = number(float(np.sqrt(figure)))
    if verdict == FINE:
        sentence = f"No slope suffers much from its neighbours; “{name}” the most."
    else:
        sentence = (
            f"The other regressors explain “{name}” almost entirely: its standard error is {wider} "
            "times what it would be alone. The data say little about it separately from the others; "
            "the prior decides."
        )
    return Check("variance_inflation", equation.name, figure, INFLATION, verdict, sentence)


def _exact_fit(equation: Equation, alone: Alone, response: Array) -> Check:
    around = response - response.mean() if alone.has_intercept else response
    spread = float(np.sqrt(around @ around))
    left = float(np.sqrt(alone.residuals @ alone.residuals))
    figure = left / spread if spread > 0.0 else 0.0
    if figure > EXACT:
        verdict = FINE
        sentence = f"The regressors leave {number(100 * figure)}% of the response's spread to the errors."
    else:
        verdict = WARNING
        sentence = (
            "The regressors reproduce the response exactly, or the response never varies, so there is "
            "no error to estimate. Is the response, or a part of it, among its own regressors?"
        )
    return Check("exact_fit", equation.name, figure, EXACT, verdict, sentence)


def _durbin_watson(equation: Equation, alone: Alone, response: Array, periods: Periods) -> Check:
    figure = statistics.durbin_watson(alone.residuals, periods.ordinals)
    if not np.any(np.diff(periods.ordinals) == 1) or alone.free < 3:
        sentence = "Too few neighbouring periods to see whether errors carry over."
        return Check("durbin_watson", equation.name, None, None, NOTE, sentence)
    lower, upper = statistics.durbin_watson_bounds(alone, periods.ordinals, LEVEL / 2)
    threshold = lower if figure < (lower + upper) / 2 else upper
    if lower <= figure <= upper:
        verdict = FINE
        sentence = f"Within {number(lower)} to {number(upper)}, as errors that do not carry over would give."
    else:
        carry = "carry over from one period to the next" if figure < lower else "swing from side to side"
        verdict = NOTE
        sentence = (
            f"Outside {number(lower)} to {number(upper)}: the errors seem to {carry}, which makes "
            "the intervals less trustworthy than they look."
        )
    if _has_own_lag(alone.design, response):
        sentence += (
            " With the previous outcome among the regressors this figure is drawn towards 2; go by the "
            "Breusch-Godfrey test."
        )
    return Check("durbin_watson", equation.name, figure, threshold, verdict, sentence)


def _has_own_lag(design: Array, response: Array) -> bool:
    return bool(np.any(np.all(design[1:] == response[:-1, None], axis=0)))


def _breusch_godfrey(equation: Equation, alone: Alone, periods: Periods) -> Check:
    order = SEASONAL_ORDERS.get(periods.kind, 1)
    if alone.free - order < order:
        order = 1
    if alone.free - order < 2:
        sentence = "Too few periods are left over to test whether errors carry over."
        return Check("breusch_godfrey", equation.name, None, LEVEL, NOTE, sentence)
    _, p = statistics.breusch_godfrey(alone, periods.ordinals, order)
    reach = "one period to the next" if order == 1 else f"any of the {order} periods before"
    if p >= LEVEL:
        sentence = f"No sign that errors carry over from {reach} ({p_value(p)})."
    else:
        sentence = (
            f"The errors carry over from {reach} ({p_value(p)}): intervals are likely too narrow. "
            "Consider the previous outcome as a regressor, or a trend."
        )
    return Check("breusch_godfrey", equation.name, p, LEVEL, _verdict(p), sentence)


def _heteroskedasticity(equation: Equation, alone: Alone) -> Check:
    if alone.free < 3:
        sentence = "Too few periods are left over to see whether the errors' size changes."
        return Check("heteroskedasticity", equation.name, None, LEVEL, NOTE, sentence)
    _, p = statistics.heteroskedasticity(alone)
    if p >= LEVEL:
        sentence = f"No sign that the size of the errors changes with the regressors ({p_value(p)})."
    else:
        sentence = (
            f"The size of the errors changes with the regressors ({p_value(p)}): intervals are too "
            "narrow in some periods and too wide in others. A log of the response often helps."
        )
    return Check("heteroskedasticity", equation.name, p, LEVEL, _verdict(p), sentence)


def _verdict(p: float) -> str:
    return FINE if p >= LEVEL else NOTE if p >= STRICT_LEVEL else WARNING


def _influence(equation: Equation, alone: Alone, periods: Periods) -> Iterator[Check]:
    yield _leverage(equation, alone, periods)
    if alone.free < 2 or np.all(alone.leverage >= statistics.FULL_LEVERAGE):
        return
    distances = statistics.cooks_distances(alone)
    worst = int(np.nanargmax(distances))
    figure, when = float(distances[worst]), periods.labels[worst]
    if figure < COOK:
        verdict = FINE
        sentence = f"No single period decides the estimates; {when} moves them the most."
    else:
        verdict = NOTE
        sentence = (
            f"Leaving out {when} would move the estimates noticeably: look whether that period is in order."
        )
    yield Check("cooks_distance", equation.name, figure, COOK, verdict, sentence)
    yield _outlying(equation, alone, periods)


def _leverage(equation: Equation, alone: Alone, periods: Periods) -> Check:
    n, p = alone.design.shape
    worst = int(np.argmax(alone.leverage))
    figure, threshold = float(alone.leverage[worst]), min(HIGH_LEVERAGE * p / n, 1.0)
    when = periods.labels[worst]
    if figure >= statistics.FULL_LEVERAGE:
        verdict = NOTE
        sentence = (
            f"{when} has a coefficient to itself and is fitted exactly: it says nothing about the others."
        )
    elif figure <= threshold:
        verdict = FINE
        sentence = f"The regressors of no period stand far from the rest; {when} the farthest."
    else:
        verdict = NOTE
        sentence = f"The regressors of {when} stand far from the rest, so the fit leans on that one period."
    return Check("leverage", equation.name, figure, threshold, verdict, sentence)


def _outlying(equation: Equation, alone: Alone, periods: Periods) -> Check:
    """Hold the largest studentised residual against Bonferroni's bound for the largest of T."""
    sizes = np.abs(statistics.studentised_residuals(alone))
    worst = int(np.nanargmax(sizes))
    figure = float(sizes[worst])
    tail = LEVEL / (2.0 * len(sizes))
    threshold = float(-scipy.special.stdtrit(alone.free - 1, tail))
    when = periods.labels[worst]
    if figure <= threshold:
        verdict = FINE
        sentence = f"No period is out of line with the others; {when} is the farthest."
    else:
        verdict = NOTE
        sentence = (
            f"{when} is out of line with all other periods: a slip in the data, an event, or errors "
            "with heavy tails."
        )
    return Check("outlying_period", equation.name, figure, threshold, verdict, sentence)
