"""Sentences made from the numbers: what was asked, and the answer first."""

from __future__ import annotations

import tomllib
from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

from bayes_sys.classical.check import CROWDED
from bayes_sys.report.numbers import as_float, counted, fixed, listed, number, percent

if TYPE_CHECKING:
    import pandas as pd

    from bayes_sys.report.content import RunContent

INTERCEPT = "intercept"
DATA_DECIDE, PRIOR_DECIDES = 0.1, 0.5
"""Share of the prior up to which the data are said to decide, and from which the prior is."""
MOVED = 1.0
"""Classical standard errors from which a coefficient is said to have moved."""
LEAST_MOVE = 0.1
"""Classical standard errors below which no coefficient is singled out as the one that moved furthest."""


def answer(content: RunContent) -> list[str]:
    """Return the sentences that stand first: shared shocks, signs, who decides, and against the classics."""
    coefficients, correlations = content.tables.get("coefficients"), content.tables.get("correlations")
    sentences = []
    if correlations is not None and len(correlations):
        sentences.append(shared_shocks(correlations))
    if coefficients is not None and len(coefficients):
        sentences += [signs(coefficients), who_decides(coefficients, pools=_pools(content))]
        sentences += [thin_errors(coefficients), against_classics(coefficients, content)]
    return [sentence for sentence in sentences if sentence]


def shared_shocks(correlations: pd.DataFrame) -> str:
    """Say which equations share shocks, as far as the data tell."""
    clear = correlations[(correlations["q5"] > 0) | (correlations["q95"] < 0)]
    strongest = correlations.iloc[int(correlations["mean"].abs().argmax())]
    found = (
        f"between {strongest['equation_a']} and {strongest['equation_b']}: mean {fixed(strongest['mean'])}, "
        f"between {fixed(strongest['q5'])} and {fixed(strongest['q95'])} with 90% probability"
    )
    if len(correlations) == 1:
        tail = "its sign is clear." if len(clear) else "the data leave its sign open."
        return f"There is one correlation of the shocks, {found}; {tail}"
    if clear.empty:
        return (
            "The data do not show clearly which equations share their shocks: none of the "
            f"{len(correlations)} correlations has a clear sign. The strongest is {found}."
        )
    share = f"{len(clear)} of the {len(correlations)} pairs of equations have correlated shocks of clear sign"
    if len(clear) == len(correlations):
        share = f"All {len(correlations)} pairs of equations have correlated shocks of clear sign"
    elif len(clear) == 1:
        share = f"1 of the {len(correlations)} pairs of equations has correlated shocks of clear sign"
    return f"{share}. The strongest correlation is {found}."


def signs(coefficients: pd.DataFrame, at_most: int = 4) -> str:
    """Say regressor by regressor in how many equations its sign is clear."""
    slopes = coefficients[coefficients["regressor"] != INTERCEPT]
    if slopes.empty:
        return ""
    parts = [
        (_clear(rows), _sign_of_one(str(name), rows))
        for name, rows in slopes.groupby("regressor", sort=False)
    ]
    told = [text for _, text in sorted(parts, key=lambda part: -part[0])[:at_most]]
    rest = len(parts) - len(told)
    more = f"; {counted(rest, 'further regressor')} below" if rest > 0 else ""
    return f"Signs at 90%: {'; '.join(told)}{more}."


def _clear(rows: pd.DataFrame) -> float:
    return float(((rows["q5"] > 0) | (rows["q95"] < 0)).mean())


def _sign_of_one(name: str, rows: pd.DataFrame) -> str:
    up, down, n = int((rows["q5"] > 0).sum()), int((rows["q95"] < 0).sum()), len(rows)
    if n == 1:
        row = rows.iloc[0]
        sign = "positive" if up else "negative" if down else "of open sign"
        return f"{name} is {sign} in {row['equation']} ({number(row['q5'])} to {number(row['q95'])})"
    if not up and not down:
        return f"{name} has no clear sign in any of {n} equations"
    if n in (up, down):
        return f"{name} is clearly {'positive' if up else 'negative'} in all {n} equations {_means(rows)}"
    kinds = (("positive", rows[rows["q5"] > 0]), ("negative", rows[rows["q95"] < 0]))
    if not (up and down):
        sign, clear = kinds[0] if up else kinds[1]
        return f"{name} is clearly {sign} in {len(clear)} of {n} equations {_means(clear)}"
    parts = [f"{sign} in {len(clear)} {_means(clear)}" for sign, clear in kinds]
    return f"{name} is clearly {' and '.join(parts)} of {n} equations"


def _means(rows: pd.DataFrame) -> str:
    """Say between which values the posterior means of these rows lie."""
    low, high = number(rows["mean"].min()), number(rows["mean"].max())
    return f"(mean {low})" if len(rows) == 1 else f"(means {low} to {high})"


def _pools(content: RunContent) -> bool:
    pooled = content.tables.get("pooled")
    return pooled is not None and len(pooled) > 0


def who_decides(coefficients: pd.DataFrame, *, pools: bool = False) -> str:
    """Say for which coefficients the data decide and for which the prior does.

    The prior's share is one given the error covariance, and the sentence says so. Where coefficients are pooled,
    their prior is the mean they share, which other equations' data inform.
    """
    known = coefficients[coefficients["shrinkage"].notna()]
    if known.empty:
        return ""
    data = known[known["shrinkage"] <= DATA_DECIDE]
    prior = known[known["shrinkage"] >= PRIOR_DECIDES].sort_values("shrinkage", ascending=False)
    given, limit = "Given the errors’ scales", f"(there the prior’s share is at most {percent(DATA_DECIDE)})"
    if known["equation"].nunique() > 1:
        given += " and correlations"
    if len(data) == len(known):
        most = float(known["shrinkage"].max())
        share = "below 1%" if most < 0.01 else f"at most {percent(most)}"
        return f"{given}, the data and not the prior decide all coefficients: the prior’s share is {share}."
    start = f"{given}, the data decide {len(data) or 'none'} of {counted(len(known), 'coefficient')} {limit}"
    if prior.empty:
        return f"{start}; nowhere does the prior have the larger say."
    names = [f"{e}.{r}" for e, r in zip(prior["equation"], prior["regressor"], strict=True)]
    if pools:
        return (
            f"{start}; the prior, which for pooled coefficients is the mean they share, has the larger say on "
            f"{listed(names, 4)}: the equation’s own data say little about these."
        )
    return f"{start}; the prior has the larger say on {listed(names, 4)}: the data say little about these."


def thin_errors(coefficients: pd.DataFrame) -> str:
    """Say where few free periods leave the error covariance, and with it the intervals, largely to the prior.

    Parameters
    ----------
    coefficients : DataFrame
        Its column ``n`` counts the periods of each equation; without it nothing can be said.
    """
    if "n" not in coefficients:
        return ""
    groups = coefficients.groupby("equation", sort=False)
    free, n_equations = int((groups["n"].first() - groups.size()).min()), groups.ngroups
    if free >= CROWDED * n_equations:
        return ""
    what = "the errors’ scales and correlations are" if n_equations > 1 else "the errors’ scale is"
    left = f"leaves {counted(free, 'free period')}" if free > 0 else "leaves no free period"
    where = f"The equation with the most coefficients {left}"
    if n_equations > 1:
        where += f" against {n_equations} equations"
    part = "in good part" if free < n_equations else "in part"
    return (
        f"{where}, so {what} decided {part} by the prior, and through them the coefficients’ intervals. "
        "See whether another prior on the errors gives other answers."
    )


def against_classics(coefficients: pd.DataFrame, content: RunContent) -> str:
    """Say how far the coefficients lie from the classical joint estimate, or why there is none."""
    moved = coefficients["moved_se"]
    single = coefficients["equation"].nunique() == 1
    classic = "least-squares estimate" if single else "classical joint estimate (FGLS)"
    if moved.notna().sum() == 0:
        reason = str((content.manifest.get("reasons") or {}).get("fgls") or "").strip()
        return f"There is no {classic} to compare with. {reason}".strip()
    far = coefficients.iloc[int(moved.abs().fillna(-1.0).argmax())]
    count = int((moved.abs() > MOVED).sum())
    most = float(abs(far["moved_se"]))
    if most < LEAST_MOVE:
        return f"Every coefficient lies within {LEAST_MOVE:g} classical standard errors of the {classic}."
    lie = "No coefficient lies" if count == 0 else f"{count} of {len(coefficients)} coefficients "
    lie += {0: "", 1: "lies"}.get(count, "lie")
    return (
        f"{lie} more than one classical standard error from the {classic}; the furthest is "
        f"{far['equation']}.{far['regressor']}, by {fixed(most, 1)}."
    )


def gate_sentence(gate: Mapping[str, Any]) -> str:
    """Say in one sentence whether the draws can be used."""
    if not gate:
        return ""
    if not gate.get("passed"):
        return "The draws did not pass the gate: do not use the numbers on this page."
    effective = min(as_float(gate.get("ess_bulk_min")), as_float(gate.get("ess_tail_min")))
    return (
        f"The draws passed the gate (R-hat at most {fixed(gate.get('rhat_max'), 3)}, at least "
        f"{fixed(effective, 0)} effective draws of everything reported, "
        f"{counted(int(as_float(gate.get('divergences', 0)) or 0), 'divergent transition')})."
    )


def equations_in_words(content: RunContent) -> list[tuple[str, str]]:
    """Return, for every group of equations of the same form, their names and what explains what.

    Returns
    -------
    list of (names, form)
    """
    table = content.tables.get("coefficients", content.tables.get("benchmark"))
    if table is None:
        return []
    responses = _responses(content.study)
    groups: dict[str, list[str]] = {}
    for name, rows in table.groupby("equation", sort=False):
        names = [str(r) for r in rows["regressor"]]
        slopes = [r for r in names if r != INTERCEPT]
        groups.setdefault(_form(responses(str(name)), slopes, INTERCEPT in names), []).append(str(name))
    return [(listed(names, 30), form) for form, names in groups.items()]


def _form(response: str, slopes: list[str], constant: bool) -> str:
    """Say what explains what."""
    if not slopes:
        return f"{response} is explained by a constant alone"
    rest = "and a constant" if constant else "without a constant"
    return f"{response} is explained by {listed(slopes, 12)}, {rest}"


def _responses(study: str) -> Any:
    """Return a function from an equation's name to the name of its response."""
    try:
        spec = tomllib.loads(study)
    except tomllib.TOMLDecodeError:
        spec = {}
    common, own = spec.get("every_equation", {}), spec.get("equation", {})

    def response(name: str) -> str:
        mine = own.get(name, {}) if isinstance(own, dict) else {}
        found = mine.get("response", common.get("response", "the response"))
        return str(found).replace("{equation}", name)

    return response
