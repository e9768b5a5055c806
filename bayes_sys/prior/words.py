"""A prior card in plain sentences."""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass

from scipy.special import betaincinv, ndtri, stdtrit

from bayes_sys.prior.cards import CoefficientLine, PriorCard, ScaleLine
from bayes_sys.prior.families import COEFFICIENT_FAMILIES, SCALE_FAMILIES, Family
from bayes_sys.prior.lines import Statement, coefficient_statements, scale_statements
from bayes_sys.system.system import INTERCEPT, System

Named = tuple[str, Statement]

_SHOWN = 6
_EXAMPLE_EQUATIONS = 5
_SURE = "with 95% probability"


def describe(card: PriorCard, system: System | None = None) -> tuple[str, ...]:
    """Say in plain sentences what a card says before the data are seen.

    Parameters
    ----------
    card : PriorCard
    system : System, optional
        With it the sentences name its equations and regressors, and the correlation is spoken of at its
        number of equations; without it they follow the lines of the card.

    Returns
    -------
    tuple of str
        Units, coefficients, error scales, correlation, in this order.

    Raises
    ------
    CardError
        The card does not fit the system.
    """
    if system is None:
        coefficients, scales = _from_lines(card)
    else:
        coefficients, scales = _of_system(card, system), _scales_of_system(card, system)
    return (_units(card), *coefficients, *scales, _correlation(card, system))


def correlation_reach(concentration: float, n_equations: int) -> float:
    """Return r such that one correlation lies in (−r, r) with 90% probability under an LKJ prior.

    Parameters
    ----------
    concentration : float
        Exponent plus one of the determinant.
    n_equations : int
        Size of the correlation matrix, at least 2.

    Notes
    -----
    One correlation is 2B − 1, B ~ Beta(a, a), a = concentration + (n_equations − 2) / 2 [1]_.

    References
    ----------
    .. [1] Lewandowski, Kurowicka & Joe (2009), Journal of Multivariate Analysis 100, 1989–2001.
    """
    a = concentration + (n_equations - 2) / 2
    return float(2 * betaincinv(a, a, 0.95) - 1)


def scale_quantiles(statement: Statement) -> tuple[float, float]:
    """Return the median and the 95% quantile of one error scale, in the units of the statement."""
    values = statement.values
    if statement.family == "half_normal":
        return float(values["scale"] * ndtri(0.75)), float(values["scale"] * ndtri(0.975))
    if statement.family == "half_student_t":
        middle, high = stdtrit(values["df"], 0.75), stdtrit(values["df"], 0.975)
        return float(values["scale"] * middle), float(values["scale"] * high)
    if statement.family == "exponential":
        return values["mean"] * math.log(2), values["mean"] * math.log(20)
    return values["median"], values["median"] * math.exp(float(ndtri(0.95)) * values["spread"])


def _units(card: PriorCard) -> str:
    if not card.scaled:
        return "The prior speaks in the units of the data."
    return (
        "The prior speaks in spreads: the standard deviation of a series after its linear trend is taken "
        "out. A slope is counted in spreads of the response for one spread of the regressor (for the whole "
        "step of a regressor of zeros and ones)."
    )


def _correlation(card: PriorCard, system: System | None) -> str:
    n_equations = system.n_equations if system is not None else _EXAMPLE_EQUATIONS
    if n_equations == 1:
        return "There is one equation, so the prior of the correlation plays no part."
    concentration = card.correlation.concentration
    reach = _number(correlation_reach(concentration, n_equations))
    among = "the two equations" if n_equations == 2 else f"any two of {n_equations} equations"
    return (
        f"Before the data are seen, the correlation between the errors of {among} lies within ±{reach} with "
        f"90% probability (LKJ, concentration {concentration:g})."
    )


@dataclass(frozen=True)
class _Subject:
    """What a sentence speaks of: slopes or intercepts, of one name or all, in some equations or all."""

    intercept: bool
    name: str = ""
    equations: tuple[str, ...] = ()

    def singular(self) -> str:
        """Return "every slope", "the slope of heat in alder", ..."""
        if self.intercept:
            noun = "the intercept" if self.equations else "every intercept"
        elif self.name:
            noun = f"the slope of {self.name}"
        else:
            noun = "every slope"
        return noun + self._whose()

    def plural(self) -> str:
        """Return "slopes of one name", "the slopes of heat", "the intercepts", ..."""
        noun = "intercepts" if self.intercept else "slopes"
        if self.name or self.intercept:
            return f"the {noun}{'' if self.intercept else f' of {self.name}'}{self._whose()}"
        return f"{noun} of one name{self._whose()}"

    def _whose(self) -> str:
        more = " and others" if len(self.equations) > _SHOWN else ""
        return f" in {', '.join(self.equations[:_SHOWN])}{more}" if self.equations else ""


def _of_system(card: PriorCard, system: System) -> list[str]:
    """Return the sentences on the coefficients of a system, like ones taken together."""
    laws = dict(zip(system.coefficients, coefficient_statements(card, system), strict=True))
    sentences = []
    for intercept in (False, True):
        chosen = {pair: law for pair, law in laws.items() if (pair[1] == INTERCEPT) == intercept}
        if not chosen:
            continue
        if _alike(chosen.values()):
            law = next(iter(chosen.values()))
            sentences.append(_sentence(_Subject(intercept), [("", law)], card.scaled))
            continue
        for name in dict.fromkeys(regressor for _, regressor in chosen):
            members = [(equation, law) for (equation, own), law in chosen.items() if own == name]
            sentences += _by_name(name, members, card.scaled)
    return sentences


def _by_name(name: str, members: list[Named], scaled: bool) -> list[str]:
    """Return the sentences on like-named coefficients, one per family."""
    sentences = []
    for family in dict.fromkeys(law.family for _, law in members):
        own = [(equation, law) for equation, law in members if law.family == family]
        some = tuple(equation for equation, _ in own) if len(own) < len(members) else ()
        shown = [("", own[0][1])] if _alike(law for _, law in own) else own
        sentences.append(_sentence(_Subject(name == INTERCEPT, name, some), shown, scaled))
    return sentences


def _sentence(subject: _Subject, laws: Sequence[Named], scaled: bool) -> str:
    """Return one sentence on one law, or on laws of one family that differ from equation to equation."""
    point = _point(laws, scaled) if subject.intercept else ""
    if laws[0][1].family == "pooled":
        return _pooled(subject, laws, point)
    what = _each([(name, _range(law)) for name, law in laws])
    return f"Before the data are seen, {subject.singular()}{point} lies {_SURE} {what}."


def _pooled(subject: _Subject, laws: Sequence[Named], point: str) -> str:
    """Return the sentence on coefficients that share a mean and a spread."""
    values = laws[0][1].values
    shared = _range(Statement("normal", {"mean": values["mean"], "scale": values["mean_scale"]}))
    middle, high = scale_quantiles(Statement("half_normal", {"scale": values["spread_scale"]}))
    who = subject.plural()
    text = (
        f"{who[0].upper()}{who[1:]}{point} are thought alike: they share a value that lies {_SURE} {shared}, "
        f"and stray from it with a standard deviation that is as likely below as above {_number(middle)}, "
        f"and {_SURE} below {_number(high)}"
    )
    if all(law.values["unit"] == 1.0 for _, law in laws):
        return text + "."
    return (
        f"{text}; all this in units of {_each([(name, _number(law.values['unit'])) for name, law in laws])}."
    )


def _each(texts: list[tuple[str, str]]) -> str:
    """Return the only text, or each with its equation, the first few of many."""
    shown = [f"{text} ({name})" if name else text for name, text in texts]
    return "; ".join(shown[:_SHOWN]) + ("; and so on" if len(shown) > _SHOWN else "")


def _point(laws: Sequence[Named], scaled: bool) -> str:
    """Say where an intercept is stated."""
    if scaled and laws[0][1].family == "pooled":
        return (
            " (counted from the average of the responses' means, in units of their typical spread, where the "
            "regressors stand at their means)"
        )
    if scaled:
        return " (counted from the mean of the response, where the regressors stand at their means)"
    if any(law.at for _, law in laws):
        return " (where the regressors stand at the point the card names)"
    return " (where all regressors are 0)"


def _range(statement: Statement) -> str:
    """Return where 95% of the law lies."""
    values = statement.values
    quantile = stdtrit(values["df"], 0.975) if statement.family == "student_t" else ndtri(0.975)
    centre, half = values["mean"], float(quantile * values["scale"])
    if centre == 0.0:
        return f"within ±{_number(half)}"
    places = max(0, 1 - math.floor(math.log10(half)))
    low, high = (f"{bound:.{places}f}".replace("-", "−") for bound in (centre - half, centre + half))
    return f"between {low} and {high}"


def _scales_of_system(card: PriorCard, system: System) -> list[str]:
    statements = scale_statements(card, system)
    if _alike(statements):
        return [_scale_sentence([("every equation", statements[0])], card.scaled)]
    return [_scale_sentence(list(zip(system.names, statements, strict=True)), card.scaled)]


def _scale_sentence(named: Sequence[Named], scaled: bool) -> str:
    """Return the sentence on error scales, shared or equation by equation."""
    units = " spreads of the response" if scaled else ""
    pairs = [(name, *(_number(q) for q in scale_quantiles(law))) for name, law in named]
    if len(pairs) == 1:
        who, middle, high = pairs[0]
        return (
            f"The standard deviation of the errors of {who} is as likely below as above {middle}{units}, and "
            f"{_SURE} below {high}."
        )
    shown = _each([(name, f"{middle} and {high}") for name, middle, high in pairs])
    counted = f", in{units}" if scaled else ""
    return (
        "The standard deviation of the errors is as likely below as above the first of these numbers, and "
        f"{_SURE} below the second{counted}: {shown}."
    )


def _from_lines(card: PriorCard) -> tuple[list[str], list[str]]:
    """Return the sentences on coefficients and on error scales, line by line.

    A line that only completes others (and so gives no law by itself) is left out.
    """
    complete = [(subject, _complete(law, COEFFICIENT_FAMILIES)) for subject, law in _laws_of_lines(card)]
    sentences = [_sentence(subject, [("", law)], card.scaled) for subject, law in complete if law is not None]
    if len(sentences) > 2:
        sentences.append("Where two of these sentences speak of one coefficient, the later one holds.")
    return sentences, _scales_from_lines(card)


def _laws_of_lines(card: PriorCard) -> list[tuple[_Subject, Statement]]:
    """Return what each line says together with the more general ones, the most particular last."""
    table, nothing = card.coefficients, Statement("", {})
    general = _merge(nothing, table, COEFFICIENT_FAMILIES)
    below_intercept = nothing if general.family == "pooled" else general
    named = {"": general, INTERCEPT: below_intercept}
    for name, line in table.of.items():
        if "." not in name:
            named[name] = _merge(named.get(name, general), line, COEFFICIENT_FAMILIES)
    laws = [(_Subject(name == INTERCEPT, name), law) for name, law in named.items()]
    for equation, line in table.in_equation.items():
        laws.append((_Subject(False, "", (equation,)), _merge(general, line, COEFFICIENT_FAMILIES)))
    for label, line in table.of.items():
        equation, _, name = label.rpartition(".")
        if equation:
            law = named.get(name, general)
            if equation in table.in_equation:
                law = _merge(law, table.in_equation[equation], COEFFICIENT_FAMILIES)
            laws.append(
                (_Subject(name == INTERCEPT, name, (equation,)), _merge(law, line, COEFFICIENT_FAMILIES))
            )
    return laws


def _scales_from_lines(card: PriorCard) -> list[str]:
    general = _merge(Statement("", {}), card.scales, SCALE_FAMILIES)
    laws = {"every equation": general}
    laws |= {n: _merge(general, line, SCALE_FAMILIES) for n, line in card.scales.in_equation.items()}
    complete = [(name, _complete(law, SCALE_FAMILIES)) for name, law in laws.items()]
    return [_scale_sentence([(name, law)], card.scaled) for name, law in complete if law is not None]


def _merge(below: Statement, line: CoefficientLine | ScaleLine, families: dict[str, Family]) -> Statement:
    """Lay one line over a more general one."""
    family = line.family or below.family
    values = {**below.values, **line.given}
    if family in families:
        values = {key: value for key, value in values.items() if key in families[family].keys}
    at = line.at if isinstance(line, CoefficientLine) and line.at is not None else below.at
    return Statement(family, values, dict(at))


def _complete(statement: Statement, families: dict[str, Family]) -> Statement | None:
    """Return the statement with its defaults, or None if it says too little."""
    law = families.get(statement.family)
    if law is None or any(key not in statement.values for key in law.required):
        return None
    return Statement(statement.family, {**dict(law.optional), **statement.values}, statement.at)


def _alike(statements: Iterable[Statement]) -> bool:
    """Return whether all say the same, whatever the point."""
    first, *rest = statements
    return all(s.family == first.family and s.values == first.values for s in rest)


def _number(value: float) -> str:
    """Write a positive number with two or three digits, without an exponent where that stays short."""
    if value == 0.0 or not 1e-4 <= abs(value) < 1e6:
        return f"{value:.2g}"
    places = max(0, 1 - math.floor(math.log10(abs(value))))
    return f"{value:.{places}f}"
