"""The page of a run: one file that opens anywhere, for a colleague who did not run it."""

from __future__ import annotations

import re
from collections.abc import Mapping
from functools import cache
from pathlib import Path
from typing import TYPE_CHECKING, Any

from bayes_sys import runs
from bayes_sys.classical.check import for_people
from bayes_sys.report.content import TABLES, RunContent
from bayes_sys.report.grids import Grid, grid
from bayes_sys.report.numbers import NOTHING, as_float, counted, fixed, listed, number
from bayes_sys.report.pictures import (
    MAX_PANELS,
    coefficient_pictures,
    correlation_picture,
    equation_names,
    scale_picture,
    series_pictures,
)
from bayes_sys.report.words import answer, equations_in_words, gate_sentence

if TYPE_CHECKING:
    import jinja2
    import pandas as pd

TEMPLATES = Path(__file__).parent / "templates"
VERDICTS = ("warning", "note", "fine")
TITLES = {
    "coefficients": "Coefficients",
    "scales": "Error scales",
    "correlations": "Correlations",
    "equations": "Explained variation",
    "benchmark": "Classical benchmark",
    "checks": "Predictive checks",
    "pooled": "What pooled coefficients share",
    "fitted": "Fitted values",
}


def page(content: RunContent) -> str:
    """Build the page of a run.

    Parameters
    ----------
    content : RunContent
        What stands in the run folder; whatever is missing is left out of the page.

    Returns
    -------
    str
        One HTML file: no script, nothing loaded from elsewhere, every text from data escaped.
    """
    return environment().get_template("page.html").render(**view(content))


@cache
def environment() -> jinja2.Environment:
    """Return the template environment: everything is escaped, an unknown name is an error."""
    import jinja2

    return jinja2.Environment(
        loader=jinja2.FileSystemLoader(TEMPLATES),
        autoescape=True,
        undefined=jinja2.StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )


def view(content: RunContent) -> dict[str, Any]:
    """Return everything the template shows."""
    manifest = content.manifest
    gate = manifest.get("gate") or {}
    series = series_pictures(content)
    return {
        "title": str(manifest.get("title") or "Untitled study"),
        "status": status(manifest),
        "made": made(manifest),
        "scope": scope(content),
        "equations": equations_in_words(content),
        "together": len(equation_names(content)) > 1,
        "answer": answer(content),
        "gate_sentence": gate_sentence(gate),
        "gate": gate_rows(gate),
        "failures": texts(gate.get("failures")),
        "advice": texts(gate.get("advice")),
        "attempts": manifest.get("attempts"),
        "notes": texts(manifest.get("notes")),
        "series": series,
        "thinned": thinning(series),
        "explained": explained(content),
        "examination": examination(content),
        "coefficients": coefficient_pictures(content),
        "max_panels": MAX_PANELS,
        "has_fgls": has_values(content, "coefficients", "fgls"),
        "reasons": reasons(manifest),
        "pooled": pooled(content),
        "correlations": correlation_picture(content),
        "has_classical_correlations": has_values(content, "correlations", "fgls"),
        "scales": scale_picture(content),
        "checks": surprises(content),
        "prior_words": content.prior_words or texts(manifest.get("prior_words")),
        "card_name": str((manifest.get("card") or {}).get("name") or ""),
        "card_summary": str((manifest.get("card") or {}).get("summary") or ""),
        "command": str(manifest.get("command") or ""),
        "facts": facts(manifest),
        "tables": tables(content),
        "study": content.study,
        "card": content.card,
    }


def status(manifest: Mapping[str, Any]) -> str:
    """Return "complete", "gate-failed" or "incomplete"; a failed gate speaks louder than the status."""
    gate = manifest.get("gate") or {}
    if gate and not gate.get("passed"):
        return runs.GATE_FAILED
    found = manifest.get("status")
    return str(found) if found in runs.STATUSES else runs.INCOMPLETE


def made(manifest: Mapping[str, Any]) -> str:
    """Return when and with what the page's run was made."""
    versions = manifest.get("versions") or {}
    version = str(versions.get("bayes_sys") or "")
    created = re.sub(r"(\d)T(\d\d:\d\d)(:\d\d)?\+00:00$", r"\1 \2 UTC", str(manifest.get("created") or ""))
    # a checkout that was never installed has no version to show
    program = f"bayes-sys {version}" if version[:1].isdigit() else "bayes-sys"
    return " · ".join(part for part in (created, program) if part)


def scope(content: RunContent) -> str:
    """Return the size of the system in words."""
    names = equation_names(content)
    parts = [counted(len(names), "equation")] if names else []
    fitted = content.tables.get("fitted")
    if fitted is not None and not fitted.empty:
        periods = fitted["period"][fitted["equation"] == fitted["equation"].iloc[0]]
        parts.append(f"{counted(len(periods), 'period')}, {periods.iloc[0]} to {periods.iloc[-1]}")
    coefficients = content.tables.get("coefficients")
    if coefficients is not None:
        parts.append(counted(len(coefficients), "coefficient"))
    return " · ".join(parts)


def gate_rows(gate: Mapping[str, Any]) -> list[tuple[str, str, str, str, str]]:
    """Return what the gate looked at: figure, where it is worst, found, wanted, verdict."""
    if not gate:
        return []
    limits = gate.get("limits") or {}
    rhat, ess, divergences = (as_float(limits.get(name)) for name in ("rhat", "ess", "divergences"))
    wanted = [
        ("R-hat, largest", "rhat_max", 3, "at most", rhat, 3, "rhat_worst"),
        ("Effective draws for the middle, fewest", "ess_bulk_min", 0, "at least", ess, 0, "ess_bulk_worst"),
        ("Effective draws for the tails, fewest", "ess_tail_min", 0, "at least", ess, 0, "ess_tail_worst"),
        ("Divergent transitions", "divergences", 0, "at most", divergences, 0, ""),
        ("Energy diagnostic (BFMI), lowest", "bfmi_min", 2, "at least", 0.3, 2, ""),
    ]
    rows = []
    for label, key, decimals, sense, limit, limit_decimals, worst in wanted:
        found = as_float(gate.get(key))
        good = found <= limit if sense == "at most" else found >= limit
        verdict = "passed" if good else "failed" if found == found and limit == limit else "not known"
        asked = f"{sense} {fixed(limit, limit_decimals)}" if limit == limit else NOTHING
        where = str(gate.get(worst) or "") if worst else ""
        rows.append((label, where, fixed(found, decimals), asked, verdict))
    return rows


def thinning(series: list[Any]) -> str:
    """Say how many points are drawn where not all are."""
    drawn = sum(len(s.labels) for _, _, s in series)
    total = sum(s.n_periods for _, _, s in series)
    if drawn == total:
        return ""
    return (
        f"{drawn:,} of {total:,} points are drawn: evenly spaced ones, and those furthest outside the band. "
        "Shares outside the band are overstated by this; the predictive checks count all points."
    )


def explained(content: RunContent) -> dict[str, str]:
    """Return how much is explained in each equation, in words."""
    table = content.tables.get("equations")
    if table is None:
        return {}
    return {
        str(row["equation"]): f"R² {fixed(row['r2_mean'])} ({fixed(row['r2_q5'])} to {fixed(row['r2_q95'])})"
        for _, row in table.iterrows()
    }


def examination(content: RunContent) -> dict[str, list[dict[str, str]]]:
    """Return the verdicts before sampling; one sentence for all equations of which it is true."""
    found: dict[str, dict[tuple[str, str], list[str]]] = {verdict: {} for verdict in VERDICTS}
    for check in for_people(content.examination):
        verdict = str(check.get("verdict") or "")
        key = (str(check.get("name") or ""), str(check.get("sentence") or ""))
        equations = found[verdict if verdict in VERDICTS else "note"].setdefault(key, [])
        if check.get("equation"):
            equations.append(str(check["equation"]))
    return {
        verdict: [
            {"equation": listed(equations, 30) if equations else "", "sentence": sentence}
            for (_, sentence), equations in checks.items()
        ]
        for verdict, checks in found.items()
    }


def surprises(content: RunContent) -> dict[str, Any]:
    """Return the predictive checks: how many there are, and the sentences of those that surprise."""
    table = content.tables.get("checks")
    if table is None or table.empty:
        return {"count": 0, "surprising": [], "unavailable": 0}
    surprising = table[table["verdict"] == "surprising"]
    pairs = [(str(e), str(s)) for e, s in zip(surprising["equation"], surprising["sentence"], strict=True)]
    return {
        "count": int((table["verdict"] != "not available").sum()),
        "surprising": pairs,
        "unavailable": int((table["verdict"] == "not available").sum()),
    }


def pooled(content: RunContent) -> list[tuple[str, str, str]]:
    """Return what pooled coefficients share: regressor, shared mean, spread, each with its 90% interval."""
    table = content.tables.get("pooled")
    if table is None or table.empty:
        return []
    rows: dict[str, dict[str, str]] = {}
    for _, row in table.iterrows():
        interval = f"{number(row['mean'])} ({number(row['q5'])} to {number(row['q95'])})"
        rows.setdefault(str(row["regressor"]), {})[str(row["quantity"])] = interval
    return [
        (name, found.get("shared mean", NOTHING), found.get("spread", NOTHING))
        for name, found in rows.items()
    ]


def reasons(manifest: Mapping[str, Any]) -> list[tuple[str, str]]:
    """Return why classical estimates are empty."""
    names = {"ols": "OLS", "fgls": "FGLS", "iterated": "Iterated FGLS"}
    found = manifest.get("reasons") or {}
    return [(names.get(key, str(key)), str(reason)) for key, reason in found.items() if reason]


def facts(manifest: Mapping[str, Any]) -> list[tuple[str, str]]:
    """Return what somebody needs to repeat the run."""
    plain = ("seed", "chains", "warmup", "draws", "engine", "target_accept")
    labels = {"warmup": "warmup per chain", "draws": "draws per chain", "target_accept": "target acceptance"}
    rows = [(labels.get(key, key), str(manifest[key])) for key in plain if manifest.get(key) is not None]
    if manifest.get("study_sha256"):
        rows.append(("study, SHA-256", str(manifest["study_sha256"])))
    rows += [(f"{name}, SHA-256", str(value)) for name, value in (manifest.get("data_sha256") or {}).items()]
    versions = manifest.get("versions") or {}
    if versions:
        rows.append(("versions", ", ".join(f"{name} {value}" for name, value in versions.items())))
    timings = manifest.get("timings") or {}
    if timings:
        rows.append(("seconds", ", ".join(f"{name} {fixed(value, 1)}" for name, value in timings.items())))
    return rows


def tables(content: RunContent) -> list[tuple[str, Grid]]:
    """Return every table there is, the fitted values only while they are few."""
    found = []
    for name, title in TITLES.items():
        table = content.tables.get(name)
        if table is not None and len(table):
            without = ("sentence",) if name == "checks" else ()
            found.append((title, grid(table, TABLES[name], without=without)))
    return found


def has_values(content: RunContent, table: str, column: str) -> bool:
    """Whether a column holds any number."""
    found: pd.DataFrame | None = content.tables.get(table)
    return found is not None and column in found and bool(found[column].notna().any())


def texts(value: object) -> list[str]:
    """Return a list of texts, whatever the manifest holds."""
    if value is None or value == "":
        return []
    return [str(v) for v in value] if isinstance(value, list | tuple) else [str(value)]
