"""Sentences made from the numbers: what was asked, and the answer first."""

from __future__ import annotations

import tomllib
from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

from bayes_sys.report.numbers import as_float, counted, fixed, listed, number, percent

if TYPE_CHECKING:
    import pandas as pd

    from bayes_sys.report.content import RunContent

INTERCEPT = "intercept"
DATA_DECIDE, PRIOR_DECIDES = 0.1, 0.5
"""Share of the prior up to which the data are said to decide, and from which the prior is."""
MOVED = 1.0
"""Classical standard errors from which a coefficient is said to have moved."""


def answer(content: RunContent) -> list[str]:
    """Return the sentences that stand first: shared shocks, signs, who decides, and against the classics."""
    coefficients, correlations = content.tables.get("coefficients"), content.tables.get("correlations")
    sentences = []
    if correlations is not None and len(correlations):
        sentences.append(shared_shocks(correlations))
    if coefficients is not None and len(coefficients):
        sentences += [signs(coefficients), who_decides(coefficients, pools=_pools(content))]
        sentences.append(against_classics(coefficients, content))
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
    means = f"(means {number(rows['mean'].min())} to {number(rows['mean'].max())})"
    if n in (up, down):
        return f"{name} is clearly {'positive' if up else 'negative'} in all {n} equations {means}"
    parts = [f"{sign} in {k}" for k, sign in ((up, "positive"), (down, "negative")) if k]
    return f"{name} is clearly {' and '.join(parts)} of {n} equations {means}"


def _pools(content: RunContent) -> bool:
    pooled = content.tables.get("pooled")
    return pooled is not None and len(pooled) > 0


def who_decides(coefficients: pd.DataFrame, *, pools: bool = False) -> str:
    """Say for which coefficients the data decide and for which the prior does.

    Where coefficients are pooled, their prior is the mean they share, which other equations' data inform.
    """
    known = coefficients[coefficients["shrinkage"].notna()]
    if known.empty:
        return ""
    data = known[known["shrinkage"] <= DATA_DECIDE]
    prior = known[known["shrinkage"] >= PRIOR_DECIDES].sort_values("shrinkage", ascending=False)
    limit = f"(there the prior’s share is at most {percent(DATA_DECIDE)})"
    if len(data) == len(known):
        most = float(known["shrinkage"].max())
        share = "below 1%" if most < 0.01 else f"at most {percent(most)}"
        return f"The data, not the prior, decide all coefficients: the prior’s share is {share}."
    start = f"The data decide {len(data)} of {counted(len(known), 'coefficient')} {limit}"
    if prior.empty:
        return f"{start}; nowhere does the prior have the larger say."
    names = [f"{e}.{r}" for e, r in zip(prior["equation"], prior["regressor"], strict=True)]
    if pools:
        return (
            f"{start}; the prior, which for pooled coefficients is the mean they share, has the larger say on "
            f"{listed(names, 4)}: the equation's own data say little about these."
        )
    return f"{start}; the prior has the larger say on {listed(names, 4)}: the data say little about these."


def against_classics(coefficients: pd.DataFrame, content: RunContent) -> str:
    """Say how far the coefficients lie from the classical joint estimate, or why there is none."""
    moved = coefficients["moved_se"]
    if moved.notna().sum() == 0:
        reason = str((content.manifest.get("reasons") or {}).get("fgls") or "").strip()
        return f"There is no classical joint estimate (FGLS) to compare with. {reason}".strip()
    far = coefficients.iloc[int(moved.abs().fillna(-1.0).argmax())]
    count = int((moved.abs() > MOVED).sum())
    name = f"{far['equation']}.{far['regressor']}"
    if count == 0:
        return (
            "No coefficient lies more than one classical standard error from the classical joint estimate "
            f"(FGLS); the furthest is {name}, by {fixed(abs(far['moved_se']), 1)}."
        )
    lie = "coefficients lies" if count == 1 else "coefficients lie"
    return (
        f"{count} of {len(coefficients)} {lie} more than one classical standard error from the classical "
        f"joint estimate (FGLS); the furthest is {name}, by {fixed(abs(far['moved_se']), 1)}."
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
