"""A card is read as written, and refused with a message that can be acted on."""

from __future__ import annotations

import tomllib
from pathlib import Path
from types import SimpleNamespace
from typing import Any

import pytest

from bayes_sys.errors import CardError
from bayes_sys.prior.cards import build_card, read_card, study_card

CARD = """
name = "quarterly-desk"
summary = "One sentence."
scaled = false
[coefficients]
family = "normal"
mean = 0.0
scale = 10.0
[coefficients.of.intercept]
scale = 20.0
[coefficients.in.alder]
scale = 5.0
[coefficients.of."alder.log_tariff"]
mean = -0.4
scale = 0.2
[scales]
family = "half_normal"
scale = 5.0
[scales.in.alder]
scale = 2.0
[correlation]
family = "lkj"
concentration = 2.0
"""


def text_with(*, coefficients: str = 'family = "normal"\nscale = 1.0', more: str = "") -> str:
    """Return a card whose tables are all in order but for what is given."""
    return (
        f'name = "own"\n[coefficients]\n{coefficients}\n[scales]\nfamily = "half_normal"\nscale = 1.0\n'
        f"[correlation]\nconcentration = 2.0\n{more}"
    )


def refusal(text: str) -> str:
    with pytest.raises(CardError) as caught:
        build_card(tomllib.loads(text), where="own.toml")
    assert caught.value.exit_code == 2
    return str(caught.value)


def test_every_line_of_a_card_is_kept_as_written() -> None:
    card = build_card(tomllib.loads(CARD))
    assert (card.name, card.summary, card.scaled) == ("quarterly-desk", "One sentence.", False)
    assert (card.coefficients.family, card.coefficients.given) == ("normal", {"mean": 0.0, "scale": 10.0})
    assert card.coefficients.of["intercept"].given == {"scale": 20.0}
    assert card.coefficients.in_equation["alder"].given == {"scale": 5.0}
    assert card.coefficients.of["alder.log_tariff"].given == {"mean": -0.4, "scale": 0.2}
    assert (card.scales.family, card.scales.in_equation["alder"].given) == ("half_normal", {"scale": 2.0})
    assert card.correlation.concentration == 2.0
    assert card.autocorrelation is None and card.tails is None


def test_whole_numbers_are_numbers() -> None:
    card = build_card(tomllib.loads(text_with(coefficients='family = "normal"\nscale = 3')))
    assert card.coefficients.given == {"scale": 3.0}


def test_star_dot_regressor_is_the_line_of_that_regressor() -> None:
    card = build_card(tomllib.loads(text_with(more='[coefficients.of."*.heat"]\nscale = 2.0')))
    assert card.coefficients.of["heat"].given == {"scale": 2.0}


def test_autocorrelation_and_tails_have_the_documented_defaults() -> None:
    card = build_card(tomllib.loads(text_with(more="[autocorrelation]\nmean = 0.3\n[tails]")))
    assert card.autocorrelation is not None and card.tails is not None
    assert card.autocorrelation.given == {"mean": 0.3, "scale": 0.5, "limit": 0.95}
    assert (card.autocorrelation.family, card.tails.family) == ("normal", "gamma")
    assert card.tails.given == {"shape": 2.0, "rate": 0.1}


def test_a_card_cannot_be_changed_afterwards() -> None:
    with pytest.raises(Exception, match="frozen"):
        build_card(tomllib.loads(CARD)).name = "other"  # type: ignore[misc]


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        (text_with() + "[coeficients]", ["own.toml", "“coeficients”", "Did you mean “coefficients”?"]),
        (
            text_with(more="[scales.off.a]\nscale = 1.0"),
            ["[scales.off]: “off” is not a key", "Known: “family”"],
        ),
        (text_with(coefficients='family = "normal"\nscael = 1.0'), ["[coefficients], scael", "“scale”?"]),
        (text_with(more="[coefficients.of.x]\nspred = 1.0"), ["[coefficients.of.x], spred", "is not a key"]),
        (
            text_with(more='[coefficients.in."St. John"]\nscalee = 1.0'),
            ['[coefficients.in."St. John"], scalee'],
        ),
        (text_with(more="[scales.in.a]\nscal = 1.0"), ["[scales.in.a], scal", "“scale”?"]),
        (text_with(more="[tails]\nrat = 1.0"), ["[tails], rat", "“rate”?"]),
        (
            text_with(coefficients='family = "norml"'),
            ["[coefficients], family", "“norml” is not a family of "],
        ),
        (text_with(coefficients='family = "norml"'), ["Did you mean “normal”?"]),
        (text_with(coefficients='family = "normal"\ndf = 3'), ["[coefficients], df", "the family “normal”"]),
        (
            text_with(coefficients='family = "pooled"\nscale = 3'),
            ["scale", "“pooled”", "Did you mean “mean_scale”"],
        ),
        (
            text_with(more='[scales.in.a]\nfamily = "exponential"\nscale = 1'),
            ["[scales.in.a], scale", "“mean”"],
        ),
        (text_with(more='[autocorrelation]\nfamily = "beta"'), ["[autocorrelation], family", "“normal”"]),
        (text_with(coefficients="family = 3"), ["[coefficients], family", "3 was found, a text in quotes"]),
        (text_with(coefficients='family = "normal"\nscale = "1"'), ["'1' was found, a number was expected"]),
        (
            text_with(coefficients='family = "normal"\nscale = true'),
            ["True was found, a number was expected"],
        ),
        (text_with(coefficients='family = "normal"\nscale = 0.0'), ["0.0 was found, a number above 0"]),
        (
            text_with(coefficients='family = "normal"\nscale = -2'),
            ["[coefficients], scale", "a number above 0"],
        ),
        (text_with(coefficients='family = "normal"\nscale = inf'), ["inf was found, a finite number"]),
        (text_with(coefficients='family = "normal"\nmean = nan'), ["nan was found, a finite number"]),
        (
            text_with(coefficients='family = "student_t"\ndf = 0\nscale = 1'),
            ["[coefficients], df", "above 0"],
        ),
        (text_with(more="[autocorrelation]\nlimit = 1.5"), ["limit", "1.5 was found, a number at most 1"]),
        (text_with().replace("concentration = 2.0", "concentration = -1"), ["concentration", "above 0"]),
        (
            text_with().replace("concentration = 2.0", ""),
            ["[correlation], concentration", "“concentration” is missing"],
        ),
        ('name = "own"\n[coefficients]\n[correlation]\nconcentration = 1', ["The table [scales] is missing"]),
        (
            'name = "own"\nscales = 3\n[coefficients]\n[correlation]\nconcentration = 1',
            ["a table was expected"],
        ),
        ('scaled = "yes"\n' + text_with(), ["scaled", "true or false was expected"]),
        (
            text_with(more="[coefficients.of.alder.x]\nscale = 1"),
            ["inside a table", '[coefficients.of."alder.x"]'],
        ),
        (
            text_with(more='[coefficients.of.x]\nscale = 1\n[coefficients.of."*.x"]\nscale = 1'),
            ["written twice"],
        ),
        (
            text_with(coefficients="at = { x = 1 }"),
            ["“at” stands on the line “coefficients”", "of.intercept"],
        ),
        (text_with(more="[coefficients.of.x]\nat = { y = 1 }"), ["“at” stands on the line “of.x”"]),
        (text_with(more="[coefficients.in.a]\nat = { y = 1 }"), ["“at” stands on the line “in.a”"]),
        (
            "scaled = true\n" + text_with(more="[coefficients.of.intercept]\nat = { y = 1 }"),
            ["scaled = false"],
        ),
        (
            text_with(more='[coefficients.of.intercept]\nat = { y = "a" }'),
            ["[coefficients.of.intercept.at], y"],
        ),
    ],
)
def test_what_is_wrong_with_a_card_is_said_with_place_and_mend(text: str, expected: list[str]) -> None:
    message = refusal(text)
    for part in expected:
        assert part in message


def test_an_unknown_key_is_told_before_the_key_it_makes_missing() -> None:
    text = text_with().replace("concentration = 2.0", "concentation = 2.0")
    assert "Did you mean “concentration”?" in refusal(text)


def test_a_card_is_found_by_name_before_it_is_looked_for_as_a_file(tmp_path: Path) -> None:
    (tmp_path / "vague").write_text(CARD)
    assert read_card("vague", folder=tmp_path).name == "vague"
    assert read_card("./vague", folder=tmp_path).name == "quarterly-desk"


def test_a_path_is_relative_to_the_folder_given(tmp_path: Path) -> None:
    (tmp_path / "cards").mkdir()
    (tmp_path / "cards" / "own.toml").write_text(CARD)
    assert read_card("cards/own.toml", folder=tmp_path) == build_card(tomllib.loads(CARD))
    assert read_card(tmp_path / "cards" / "own.toml").name == "quarterly-desk"


def test_a_card_without_a_name_is_called_after_its_file(tmp_path: Path) -> None:
    (tmp_path / "desk.toml").write_text(text_with().removeprefix('name = "own"\n'))
    assert read_card("desk.toml", folder=tmp_path).name == "desk"


def test_a_card_that_does_not_exist_names_the_nearest(tmp_path: Path) -> None:
    with pytest.raises(
        CardError, match=r"no prior card “weakly_informative”.*Did you mean “weakly-informative”"
    ):
        read_card("weakly_informative", folder=tmp_path)


def test_a_folder_is_no_card(tmp_path: Path) -> None:
    with pytest.raises(CardError, match="no prior card"):
        read_card(tmp_path)


def test_a_file_that_is_not_toml_names_the_line(tmp_path: Path) -> None:
    (tmp_path / "own.toml").write_text("name = \n")
    with pytest.raises(CardError, match=r"own\.toml: The file is not valid TOML: .*line 1"):
        read_card("own.toml", folder=tmp_path)


def test_a_file_that_is_not_utf8_says_so(tmp_path: Path) -> None:
    (tmp_path / "own.toml").write_bytes(b'name = "caf\xe9"\n')
    with pytest.raises(CardError, match=r"own\.toml: The file is not UTF-8 text"):
        read_card("own.toml", folder=tmp_path)


def test_a_faulty_file_is_named(tmp_path: Path) -> None:
    (tmp_path / "own.toml").write_text(text_with(coefficients='family = "normal"\nscale = 0'))
    with pytest.raises(CardError, match=r"^own\.toml, \[coefficients\], scale: "):
        read_card("own.toml", folder=tmp_path)


def study(folder: Path, card: str, **overrides: Any) -> Any:
    """Return as much of a study as a card needs."""
    return SimpleNamespace(
        folder=folder,
        label="bread.toml",
        at=lambda key: f"bread.toml, {key}",
        prior=SimpleNamespace(card=card, overrides=overrides),
    )


def test_a_study_without_overrides_uses_the_card_as_it_is(tmp_path: Path) -> None:
    assert study_card(study(tmp_path, "pooled")) == read_card("pooled")


def test_a_study_overrides_a_card_key_by_key(tmp_path: Path) -> None:
    (tmp_path / "own.toml").write_text(CARD)
    overrides = {"correlation": {"concentration": 4.0}, "coefficients": {"in": {"alder": {"mean": 1.0}}}}
    card = study_card(study(tmp_path, "own.toml", **overrides))
    assert card.correlation.concentration == 4.0
    assert card.coefficients.in_equation["alder"].given == {"mean": 1.0, "scale": 5.0}
    assert card.coefficients.given == {"mean": 0.0, "scale": 10.0}


def test_an_override_of_the_family_drops_the_keys_it_does_not_know(tmp_path: Path) -> None:
    overrides = {"scales": {"family": "exponential", "mean": 0.5}}
    card = study_card(study(tmp_path, "weakly-informative", **overrides))
    assert (card.scales.family, card.scales.given) == ("exponential", {"mean": 0.5})


def test_an_override_by_star_meets_the_cards_own_line(tmp_path: Path) -> None:
    (tmp_path / "own.toml").write_text(text_with(more="[coefficients.of.heat]\nmean = 1.0\nscale = 2.0"))
    overrides = {"coefficients": {"of": {"*.heat": {"scale": 3.0}}}}
    card = study_card(study(tmp_path, "own.toml", **overrides))
    assert card.coefficients.of["heat"].given == {"mean": 1.0, "scale": 3.0}


@pytest.mark.parametrize(
    ("overrides", "expected"),
    [
        (
            {"correlation": {"concentraton": 4.0}},
            r"^bread\.toml, \[prior\.correlation\], concentraton: .*“concentration”",
        ),
        (
            {"correlation": {"concentration": -4.0}},
            r"^bread\.toml, \[prior\.correlation\], concentration: -4\.0",
        ),
        ({"scales": {"family": "half_norml"}}, r"^bread\.toml, \[prior\.scales\], family: .*“half_normal”"),
        ({"scales": {"in": {"a": {"scal": 1.0}}}}, r"^bread\.toml, \[prior\.scales\.in\.a\], scal: "),
        (
            {"coefficients": {"income": {"scale": 1.0}}},
            r"regressor write \[prior\.coefficients\.of\.income\].*\[prior\.coefficients\.in\.income\]",
        ),
        ({"scales": {"north": {"scale": 1.0}}}, r"write \[prior\.scales\.in\.north\]"),
        ({"coefficients": {"off": {"heat": {"scale": 1.0}}}}, r"Did you mean “of”"),
    ],
)
def test_a_faulty_override_is_said_to_stand_in_the_study(
    tmp_path: Path, overrides: dict[str, Any], expected: str
) -> None:
    with pytest.raises(CardError, match=expected):
        study_card(study(tmp_path, "vague", **overrides))


def test_a_fault_of_the_card_is_not_blamed_on_the_study(tmp_path: Path) -> None:
    (tmp_path / "own.toml").write_text(text_with(coefficients='family = "normal"\nscale = 0'))
    with pytest.raises(CardError, match=r"^own\.toml, \[coefficients\], scale"):
        study_card(study(tmp_path, "own.toml", correlation={"concentration": 1.0}))


def test_a_card_that_is_not_there_is_blamed_on_the_studys_own_key(tmp_path: Path) -> None:
    with pytest.raises(CardError, match=r"^bread\.toml, prior\.card: .*“weakly-informative”"):
        study_card(study(tmp_path, "weakly_informative"))


@pytest.mark.parametrize("line", ["heat", "*.heat"])
def test_a_line_is_placed_in_the_study_where_the_study_wrote_it_and_else_in_the_card(
    tmp_path: Path, line: str
) -> None:
    (tmp_path / "own.toml").write_text(text_with(more="[coefficients.in.a]\nscale = 2.0"))
    card = study_card(study(tmp_path, "own.toml", coefficients={"of": {line: {"scale": 3.0}}}))
    assert card.place(("coefficients", "of", "heat")) == "bread.toml, [prior.coefficients.of.heat]"
    assert card.place(("coefficients", "of", "heat"), "mean") == "prior card “own”, [coefficients.of.heat]"
    assert card.place(("coefficients", "in", "a")) == "prior card “own”, [coefficients.in.a]"
