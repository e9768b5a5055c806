"""The study file: what it says becomes typed objects, and every fault is one message with its key."""

from __future__ import annotations

import datetime as dt
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
from pydantic import ValidationError

from bayes_sys.errors import NotBuiltError, StudyError
from bayes_sys.study.read import LARGEST_STUDY, make_study, read_study, refuse_unbuilt
from bayes_sys.study.spec import WeightColumn

WHOLE = """\
title = "Bread in three towns"

[data]
file = "bread.csv"
period = "year"
unit = "town"
units = ["Alder", "Birch", "St. John"]
from = 2004
to = 2021
exclude = [2011]
csv = { separator = ";", decimal = ",", missing = ["", "-"] }
[[data.shared]]
file = "national.csv"
period = "jahr"

[derive]
log_bread = { from = "bread", steps = ["log"] }
price_1 = { from = "price", steps = ["log", { lag = 1 }] }
reform = { step_from = 2015-01-01 }
strike = { pulse = "2016" }
drift = { trend = true }
term = { season = 4 }
real = { from = "price", steps = [{ over = "index" }] }
next_door = { from = "price", of_unit = "Alder" }

[every_equation]
response = "log_bread"
regressors = ["price_1", { name = "heat", column = "{equation}_heat" }]
intercept = true

[equation.Alder]
regressors = ["price_1"]
[equation."St. John"]
intercept = false

[errors]
family = "student_t"
autocorrelation = "ar1"

[prior]
card = "cards/mine.toml"
[prior.correlation]
concentration = 4.0
[prior.coefficients.of.intercept]
scale = 20

[[restriction]]
equal = ["Alder.price_1", "St. John.price_1"]
[[restriction]]
sign = "negative"
on = ["*.price_1"]
[[restriction]]
weights = { "Alder.price_1" = 1.0, "Birch.price_1" = 1 }
value = 1.0

[[contrast]]
name = "difference"
weights = { "Alder.price_1" = 1.0, "Birch.price_1" = -1.0 }
above = 0.0
inside = [-0.1, 0.1]

[scenario.dry]
file = "dry.csv"
known = { Alder = 4.31 }
[scenario.same]
hold = "last"
periods = 4
known = "known.csv"

[aggregate.total]
weights = { Alder = 1.0, Birch = 1.0 }
transform = "undo"
[aggregate.exposed]
weights = { column = "exposure" }

[risk]
levels = [0.9]
loss = "low"
[threshold]
Alder = 4.6

[sampling]
chains = 2
warmup = 500
draws = 700
seed = 7

[gate]
rhat = 1.02
ess = 400
divergences = 1

[compare]
cards = ["vague", "pooled"]
"""

LEAST = {"data": {"period": "year"}}


def refused(content: dict[str, Any]) -> StudyError:
    with pytest.raises(StudyError) as caught:
        make_study(content)
    return caught.value


def with_part(**parts: Any) -> dict[str, Any]:
    return {**LEAST, **parts}


def test_a_whole_study_file_is_read_into_typed_objects(tmp_path: Path) -> None:
    path = tmp_path / "bread.toml"
    path.write_text(WHOLE, encoding="utf-8")
    study = read_study(str(path))
    assert (study.title, study.source, study.folder) == ("Bread in three towns", path, tmp_path)
    assert study.data.units == ("Alder", "Birch", "St. John")
    assert (study.data.from_, study.data.to, study.data.exclude) == (2004, 2021, (2011,))
    assert (study.data.csv.separator, study.data.csv.decimal, study.data.csv.missing) == (";", ",", ("", "-"))
    assert study.data.shared[0].period == "jahr" and study.data.shared[0].csv is None
    assert [(s.name, s.argument) for s in study.derive["price_1"].steps] == [("log", None), ("lag", 1)]
    assert study.derive["reform"].step_from == dt.date(2015, 1, 1)
    assert (study.derive["drift"].trend, study.derive["term"].season) == (True, 4)
    assert study.derive["next_door"].of_unit == "Alder"
    heat = (study.every_equation.regressors or ())[1]
    assert (heat.name, heat.column) == ("heat", "{equation}_heat")
    assert study.equation["St. John"].intercept is False and study.equation["Alder"].intercept is None
    assert (study.errors.family, study.errors.autocorrelation) == ("student_t", "ar1")
    assert study.prior.card == "cards/mine.toml"
    assert study.prior.overrides == {
        "correlation": {"concentration": 4.0},
        "coefficients": {"of": {"intercept": {"scale": 20}}},
    }
    assert [r.sign for r in study.restriction] == [None, "negative", None]
    assert study.restriction[2].weights == {"Alder.price_1": 1.0, "Birch.price_1": 1.0}
    assert study.contrast[0].inside == (-0.1, 0.1)
    assert study.scenario["dry"].known == {"Alder": 4.31} and study.scenario["same"].known == "known.csv"
    assert study.aggregate["exposed"].weights == WeightColumn(column="exposure")
    assert study.aggregate["total"].transform == "undo" and study.aggregate["exposed"].transform == "none"
    assert study.risk is not None and (study.risk.levels, study.risk.loss) == ((0.9,), "low")
    assert study.threshold == {"Alder": 4.6}
    s, g = study.sampling, study.gate
    assert (s.chains, s.warmup, s.draws, s.seed) == (2, 500, 700, 7)
    assert (g.rhat, g.ess, g.divergences) == (1.02, 400, 1)
    assert study.compare.cards == ("vague", "pooled")


def test_what_is_left_out_has_the_documented_default() -> None:
    study = make_study(LEAST)
    s, g = study.sampling, study.gate
    assert (s.chains, s.warmup, s.draws, s.seed) == (4, 1000, 1000, 1)
    assert (g.rhat, g.ess, g.divergences) == (1.01, 1000, 0)
    assert (study.prior.card, study.prior.overrides) == ("weakly-informative", {})
    assert (study.errors.family, study.errors.autocorrelation) == ("gaussian", "none")
    assert (study.data.csv.separator, study.data.csv.decimal) == (",", ".")
    assert (study.source, study.text, study.risk, study.threshold) == (None, "", None, {})


@pytest.mark.parametrize("ending", ["\n", "\r\n"])
@pytest.mark.parametrize("mark", [b"", b"\xef\xbb\xbf"])
def test_the_text_of_a_study_gives_its_exact_bytes_back(tmp_path: Path, ending: str, mark: bytes) -> None:
    raw = mark + WHOLE.replace("\n", ending).encode()
    path = tmp_path / "s.toml"
    path.write_bytes(raw)
    assert read_study(path).text.encode() == raw


def test_a_study_from_python_is_the_study_from_the_file(tmp_path: Path) -> None:
    import tomllib

    path = tmp_path / "s.toml"
    path.write_text(WHOLE, encoding="utf-8")
    from_file, from_python = read_study(path), make_study(tomllib.loads(WHOLE), folder=tmp_path)
    for name in type(from_file).model_fields:
        if name not in ("source", "text"):
            assert getattr(from_file, name) == getattr(from_python, name), name


def test_python_objects_of_other_libraries_are_taken(tmp_path: Path) -> None:
    study = make_study(
        {
            "data": {
                "file": tmp_path / "x.csv",
                "period": "day",
                "from": pd.Timestamp("2024-01-01"),
                "exclude": np.array([3, 4]),
                "units": ("a", np.int64(2)),
                "to": None,
            },
            "sampling": {"seed": np.int64(5)},
            "gate": {"rhat": np.float64(1.05)},
        }
    )
    assert study.data.from_ == dt.date(2024, 1, 1) and study.data.exclude == (3, 4) and study.data.to is None
    assert (study.data.units, study.sampling.seed, study.gate.rhat) == (("a", "2"), 5, 1.05)


def test_a_study_cannot_be_changed() -> None:
    study = make_study(LEAST)
    with pytest.raises(ValidationError):
        study.title = "x"  # type: ignore[misc]
    study.prior.overrides["scales"] = {}
    assert study.prior.overrides == {}


@pytest.mark.parametrize(
    ("content", "key", "hint"),
    [
        ({"dat": {"period": "year"}}, "dat", "data"),
        ({"data": {"period": "year", "untis": ["a"]}}, "data.untis", "units"),
        ({"data": {"period": "year", "csv": {"seperator": ";"}}}, "data.csv.seperator", "separator"),
        (
            {"data": {"period": "year", "shared": [{"file": "x", "period": "y", "fil": 1}]}},
            "data.shared[0].fil",
            "file",
        ),
        (with_part(derive={"a": {"from": "b", "step": ["log"]}}), "derive.a.step", "steps"),
        (with_part(every_equation={"respons": "y"}), "every_equation.respons", "response"),
        (with_part(equation={"response": {"intercpt": True}}), "equation.response.intercpt", "intercept"),
        (
            with_part(equation={"alder": {"regressors": ["a", {"name": "b", "colum": "c"}]}}),
            "equation.alder.regressors[1].colum",
            "column",
        ),
        (with_part(errors={"famly": "gaussian"}), "errors.famly", "family"),
        (with_part(prior={"corelation": {}}), "prior.corelation", "correlation"),
        (with_part(restriction=[{"equals": ["a.b"]}]), "restriction[0].equals", "equal"),
        (with_part(contrast=[{"name": "x", "weight": {}}]), "contrast[0].weight", "weights"),
        (with_part(scenario={"dry season": {"fiel": "x"}}), 'scenario."dry season".fiel', "file"),
        (with_part(aggregate={"total": {"transfrom": "exp"}}), "aggregate.total.transfrom", "transform"),
        (with_part(risk={"level": [0.9]}), "risk.level", "levels"),
        (with_part(sampling={"chain": 4}), "sampling.chain", "chains"),
        (with_part(gate={"divergence": 0}), "gate.divergence", "divergences"),
        (with_part(compare={"card": []}), "compare.card", "cards"),
    ],
)
def test_an_unknown_key_at_any_level_names_its_path_and_the_nearest_known_key(
    content: dict[str, Any], key: str, hint: str
) -> None:
    error = refused(content)
    assert error.where == f"study given in Python, {key}"
    assert "no key" in error.what and f"“{hint}”" in error.mend


@pytest.mark.parametrize(
    ("content", "key", "said"),
    [
        ({}, "data", "missing"),
        ({"data": {}}, "data.period", "missing"),
        ({"data": []}, "data", "a table"),
        ({"data": {"period": 3}}, "data.period", "text in quotes"),
        ({"data": {"period": " "}}, "data.period", "empty"),
        ({"data": {"period": "y", "unit": "y"}}, "data.unit", "same column"),
        ({"data": {"period": "y", "units": []}}, "data.units", "empty"),
        ({"data": {"period": "y", "units": ["a", "b", "a"]}}, "data.units[2]", "twice"),
        ({"data": {"period": "y", "from": 1.5}}, "data.from", "expected a period"),
        ({"data": {"period": "y", "exclude": 2011}}, "data.exclude", "a list"),
        ({"data": {"period": "y", "from": dt.datetime(2024, 1, 1, 5)}}, "data.from", "time"),
        ({"data": {"period": "y", "csv": {"separator": ";;"}}}, "data.csv.separator", "one character"),
        ({"data": {"period": "y", "csv": {"decimal": ","}}}, "data.csv", "separator and decimal"),
        ({"data": {"period": "y", "csv": {"decimal": "x"}}}, "data.csv.decimal", "“.” or “,”"),
        (with_part(derive={"a": {"from": "x", "steps": []}}), "derive.a", "steps"),
        (with_part(derive={"a": {}}), "derive.a", "exactly one"),
        (with_part(derive={"a": {"from": "x", "trend": True}}), "derive.a", "from"),
        (with_part(derive={"a": {"trend": True, "steps": ["log"]}}), "derive.a.steps", "goes with"),
        (with_part(derive={"a": {"trend": False}}), "derive.a.trend", "expected true"),
        (with_part(derive={"a": {"season": 1}}), "derive.a.season", "2 to 366"),
        (with_part(derive={"a": {"season": 4.0}}), "derive.a.season", "whole number"),
        (with_part(derive={"a": {"from": "x", "steps": ["logg"]}}), "derive.a.steps[0]", "no step"),
        (with_part(derive={"a": {"from": "x", "steps": ["lag"]}}), "derive.a.steps[0]", "needs a value"),
        (
            with_part(derive={"a": {"from": "x", "steps": ["log", {"lag": 0}]}}),
            "derive.a.steps[1].lag",
            "at least 1",
        ),
        (
            with_part(derive={"a": {"from": "x", "steps": [{"lag": -1}]}}),
            "derive.a.steps[0].lag",
            "at least 1",
        ),
        (with_part(derive={"a": {"from": "x", "steps": [{"lag": True}]}}), "derive.a.steps[0].lag", "true"),
        (
            with_part(derive={"a": {"from": "x", "steps": [{"rolling_mean": 1}]}}),
            "derive.a.steps[0].rolling_mean",
            "2",
        ),
        (
            with_part(derive={"a": {"from": "x", "steps": [{"scale": 0}]}}),
            "derive.a.steps[0].scale",
            "other than 0",
        ),
        (
            with_part(derive={"a": {"from": "x", "steps": [{"over": 3}]}}),
            "derive.a.steps[0].over",
            "a column",
        ),
        (
            with_part(derive={"a": {"from": "x", "steps": [{"log": True}]}}),
            "derive.a.steps[0]",
            "takes no value",
        ),
        (with_part(derive={"a": {"from": "x", "steps": [3]}}), "derive.a.steps[0]", "expected a step"),
        (with_part(every_equation={"regressors": "x"}), "every_equation.regressors", "a list"),
        (with_part(every_equation={"regressors": [1]}), "every_equation.regressors[0]", "a column"),
        (with_part(every_equation={"regressors": ["a", "b", "a"]}), "every_equation.regressors[2]", "twice"),
        (with_part(every_equation={"regressors": ["a.b"]}), "every_equation.regressors[0]", "dot"),
        (
            with_part(every_equation={"regressors": ["intercept"]}),
            "every_equation.regressors[0]",
            "reserved",
        ),
        (
            with_part(equation={"a": {"response": "y", "regressors": ["y"]}}),
            "equation.a.regressors[0]",
            "own",
        ),
        (with_part(every_equation={"regressors": [""]}), "every_equation.regressors[0]", "empty"),
        (
            with_part(every_equation={"regressors": [{"name": "a.b"}]}),
            "every_equation.regressors[0].name",
            "dot",
        ),
        (
            with_part(every_equation={"regressors": [{"column": "a"}]}),
            "every_equation.regressors[0].name",
            "missing",
        ),
        (with_part(every_equation={"intercept": 1}), "every_equation.intercept", "true or false"),
        (with_part(errors={"family": "gausian"}), "errors.family", "“gaussian” or “student_t”"),
        (with_part(prior={"scales": 3}), "prior.scales", "a table"),
        (with_part(restriction=[{"equal": ["a.b"]}]), "restriction[0].equal", "two"),
        (with_part(restriction=[{"sign": "negative"}]), "restriction[0]", "sign and on"),
        (with_part(restriction=[{"equal": ["ab", "a.c"]}]), "restriction[0].equal[0]", "coefficient"),
        (with_part(contrast=[{"name": "x", "weights": {}}]), "contrast[0].weights", "at least one"),
        (
            with_part(contrast=[{"name": "x", "weights": {"a.b": "1"}}]),
            'contrast[0].weights."a.b"',
            "a number",
        ),
        (
            with_part(contrast=[{"name": "x", "weights": {"a.b": 1}, "inside": [1, 0]}]),
            "contrast[0].inside",
            "lower end first",
        ),
        (with_part(contrast=[{"name": "x", "weights": {"a.b": 1}}] * 2), "contrast[1].name", "two contrasts"),
        (with_part(scenario={"s": {}}), "scenario.s", "either file"),
        (with_part(scenario={"s": {"hold": "last"}}), "scenario.s", "number of periods"),
        (with_part(scenario={"s": {"file": "x", "known": {"a": "b"}}}), "scenario.s.known.a", "a number"),
        (with_part(aggregate={"t": {"weights": {"a": "b"}}}), "aggregate.t.weights.a", "a number"),
        (with_part(aggregate={"t": {"weights": {"a": 0}}}), "aggregate.t.weights", "other than 0"),
        (with_part(risk={"levels": [1.0]}), "risk.levels[0]", "less than 1"),
        (with_part(threshold={"a": "x"}), "threshold.a", "a number"),
        (with_part(sampling={"chains": 1}), "sampling.chains", "at least 2"),
        (with_part(sampling={"draws": "100"}), "sampling.draws", "whole number"),
        (with_part(sampling={"draws": True}), "sampling.draws", "whole number"),
        (with_part(sampling={"seed": -1}), "sampling.seed", "at least 0"),
        (with_part(gate={"rhat": 0.9}), "gate.rhat", "more than 1"),
        (with_part(gate={"rhat": float("inf")}), "gate.rhat", "finite"),
        (with_part(prior={"scales": {"scale": float("nan")}}), "prior.scales.scale", "finite"),
        (with_part(compare={"cards": ["a", "a"]}), "compare.cards[1]", "twice"),
    ],
)
def test_a_value_that_cannot_be_is_refused_with_its_key_and_what_was_expected(
    content: dict[str, Any], key: str, said: str
) -> None:
    error = refused(content)
    assert error.where == f"study given in Python, {key}"
    assert said in f"{error.what} {error.mend}"


def test_several_faults_are_one_message_that_tells_the_unknown_key_first() -> None:
    error = refused({"data": {"perod": "year"}, "sampling": {"chains": 1}})
    assert "data.perod" in error.where
    assert "data.period" in error.mend and "sampling.chains" in error.mend


def test_something_that_is_no_mapping_is_refused() -> None:
    with pytest.raises(StudyError, match="expected a mapping"):
        make_study(["data"])  # type: ignore[arg-type]


@pytest.mark.parametrize(
    ("raw", "said"),
    [
        (b"", "empty"),
        (b" \n\n", "empty"),
        (b"[data]\nperiod = \xff\n", "line 2: the file is not UTF-8"),
        ("[data]\n".encode("utf-16"), "not UTF-8"),
        (b"[data]\nperiod = year\n", "line 2"),
        (b"[data\n", "line 1"),
        (b"[data]\nperiod = 'y'\nperiod = 'z'\n", "line 3"),
        (b"year,town,bread\n2004,Alder,3\n", "data file"),
        (b"a = " + b"[" * 200_000 + b"]" * 200_000, "nested"),
    ],
)
def test_a_file_that_is_no_study_is_refused_with_its_line(tmp_path: Path, raw: bytes, said: str) -> None:
    path = tmp_path / "s.toml"
    path.write_bytes(raw)
    with pytest.raises(StudyError) as caught:
        read_study(path)
    assert said in str(caught.value) and "s.toml" in caught.value.where


def test_a_missing_file_says_what_is_there_instead(tmp_path: Path) -> None:
    (tmp_path / "bread.toml").write_text("", encoding="utf-8")
    with pytest.raises(StudyError, match=r"no such file.*bread\.toml"):
        read_study(tmp_path / "braed.toml")
    with pytest.raises(StudyError, match="no folder"):
        read_study(tmp_path / "nowhere" / "s.toml")


def test_a_name_the_system_cannot_take_is_refused(tmp_path: Path) -> None:
    with pytest.raises(StudyError, match="cannot be read"):
        read_study(tmp_path / ("b" * 300))


def test_a_folder_is_no_study(tmp_path: Path) -> None:
    (tmp_path / "bread.toml").write_text("", encoding="utf-8")
    with pytest.raises(StudyError, match=r"folder.*bread\.toml"):
        read_study(tmp_path)


def test_a_very_large_file_is_refused_before_it_is_read(tmp_path: Path) -> None:
    path = tmp_path / "s.toml"
    with path.open("wb") as stream:
        stream.truncate(LARGEST_STUDY + 1)
    with pytest.raises(StudyError, match="bytes"):
        read_study(path)


def test_everything_not_built_yet_is_refused_in_one_message(tmp_path: Path) -> None:
    path = tmp_path / "s.toml"
    path.write_text(WHOLE, encoding="utf-8")
    with pytest.raises(NotBuiltError) as caught:
        refuse_unbuilt(read_study(path))
    for part in (
        "[[restriction]]",
        "[[contrast]]",
        "[scenario.dry]",
        "[scenario.same]",
        "[aggregate.total]",
        "[risk]",
        "[threshold]",
        "student_t",
        "ar1",
    ):
        assert part in caught.value.what


def test_sampling_gate_and_compare_are_no_hindrance() -> None:
    refuse_unbuilt(
        make_study(with_part(sampling={"chains": 2}, gate={"ess": 10}, compare={"cards": ["vague"]}))
    )


@pytest.mark.parametrize("section", ["scenario", "aggregate", "threshold", "risk"])
def test_an_empty_section_that_is_not_built_yet_is_refused_as_a_full_one(section: str) -> None:
    with pytest.raises(NotBuiltError, match=rf"\[{section}\]"):
        refuse_unbuilt(make_study(with_part(**{section: {}})))


@pytest.mark.parametrize(
    ("section", "content"),
    [
        ("restriction", [{"equal": ["Alder.price"]}]),
        ("contrast", [{"name": "a"}]),
        ("scenario", {"dry": {"fil": "x.csv"}}),
        ("threshold", {"Alder": "high"}),
    ],
)
def test_a_fault_in_a_section_that_is_not_built_yet_says_so_before_it_is_mended(
    section: str, content: Any
) -> None:
    with pytest.raises(StudyError, match=rf"cannot do \[{section}\] yet"):
        make_study(with_part(**{section: content}))


def test_cards_to_compare_must_exist(tmp_path: Path) -> None:
    (tmp_path / "mine.toml").touch()
    make_study(with_part(compare={"cards": ["vague", "mine.toml"]}), folder=tmp_path)
    with pytest.raises(StudyError, match=r"compare\.cards\[1\].*“vageu”.*“vague”"):
        make_study(with_part(compare={"cards": ["mine.toml", "vageu"]}), folder=tmp_path)
