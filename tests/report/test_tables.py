"""Tables for people: complete, readable without colour, deaf to markup in names."""

from __future__ import annotations

import io

import pytest

from xrdmica.report.tables import GENERAL_CAUTIONS, batch_table, cautions_of, console_for, evidence_table, plain, result_table
from xrdmica.results import Findings, SampleResult


def printed(function, *arguments, **options) -> str:
    stream = io.StringIO()
    function(*arguments, console_for(stream), **options)
    return stream.getvalue()


def test_result_says_everything(full_result: SampleResult) -> None:
    text = printed(result_table, full_result)
    lines = text.splitlines()
    assert lines[0] == "Sample S12"
    assert lines[1].startswith("Swelling: YES, 18.2 % expandable (15.2 – 21.4)")
    assert "a line moves from 14.9 to 16.9 angstrom with glycol" in text
    illite = next(line for line in lines if line.strip().startswith("Illite "))
    assert illite.split() == ["Illite", "true", "mica", "present", "41.3", "38.3", "–", "44.5", "1.2"]
    for part in (
        "Vermiculite (< 2.0)", "Pyrophyllite", "d(060) of a random powder", "3.343", "quartz", "random powder from 58 to 64",
        "100 % = sheet silicates of the oriented mount", "reduced chi-square 1.43", "The swelling verdict is a screening result.",
        "file header",
    ):  # fmt: skip
        assert part in text
    assert "ASSUMED" not in text
    assert "\x1b" not in text
    assert max(map(len, lines)) <= 100


def test_assumed_radiation_is_loud(make_result) -> None:
    text = printed(result_table, make_result(origin="assumed", curves=False))
    assert "! Radiation Cu is ASSUMED for air_dried" in text


@pytest.mark.parametrize(("verdict", "words"), [("no", "Swelling: NO\n"), ("cannot tell", "Swelling: CANNOT TELL")])
def test_verdicts(make_result, verdict: str, words: str) -> None:
    assert words in printed(result_table, make_result(verdict=verdict, curves=False))


def test_unknown_is_empty_not_zero(make_result) -> None:
    result = make_result(curves=False)
    phases = tuple(
        p.model_copy(update={"weight_percent": None, "low95": None, "high95": None, "detection_limit": None})
        for p in result.proportions.phases
    )
    proportions = result.proportions.model_copy(update={"phases": phases})
    text = printed(result_table, result.model_copy(update={"proportions": proportions}))
    illite = next(line for line in text.splitlines() if line.strip().startswith("Illite "))
    assert illite.split() == ["Illite", "true", "mica", "present"]
    assert "None" not in text
    assert "nan" not in text


@pytest.mark.parametrize("name", ["[bold]x[/bold]", "[/]", "<script>", "=cmd()", "a/b", "عينة", "样品", "$x_y$", ":smile:"])
def test_names_are_not_markup(make_result, name: str) -> None:
    result = make_result(name, curves=False)
    assert f"Sample {name}" in printed(result_table, result)
    assert f"Sample {name}" in printed(evidence_table, result.findings)
    assert name in printed(batch_table, [result])


def test_control_characters_do_not_reach_the_terminal(make_result) -> None:
    text = printed(batch_table, [make_result("a\x1b[2Jb\rc\u202e", curves=False)])
    assert "\x1b" not in text
    assert "\r" not in text
    assert "\u202e" not in text
    assert plain("a\x1b[2Jb") == "a [2Jb"


def test_evidence_has_reasons_signs_and_numbers(full_result: SampleResult) -> None:
    text = printed(evidence_table, full_result.findings, scans=full_result.scans)
    assert "Illite (true mica): present, basal spacing 10.02 Å" in text
    assert "10.020 ± 0.020" in text
    signs = [line.split()[0] for line in text.splitlines() if line.strip().startswith(("+ ", "- ")) and "  " in line.strip()[:4]]
    assert signs[:3] == ["+", "+", "-"]
    assert "nothing at 14.3 angstrom collapses to 10" in text
    assert "Could also be Muscovite; what would tell: a random powder, 20-35 degrees" in text


def test_many_facts_are_cut_and_counted(full_result: SampleResult) -> None:
    first = full_result.findings.phases[0]
    many = first.model_copy(update={"evidence": first.evidence * 5})
    findings = full_result.findings.model_copy(update={"phases": (many,)})
    short, long = printed(evidence_table, findings), printed(evidence_table, findings, most=None)
    assert short.count("where it belongs") == 5
    assert short.count("does not move") == 3
    assert "7 lighter facts are not shown, 5 of them against it" in short
    assert long.count("weaker than it should be") == 5
    assert "not shown" not in long


def test_nothing_found_is_said() -> None:
    assert "No phase of the library was found" in printed(evidence_table, Findings(sample="x", phases=()))


def test_long_names_wrap_within_the_width(make_result) -> None:
    text = printed(batch_table, [make_result("x" * 250, curves=False)])
    assert max(map(len, text.splitlines())) <= 100
    assert text.count("x") >= 250


def test_doubtful_phases_are_marked(make_result) -> None:
    result = make_result(curves=False)
    stream = io.StringIO()
    batch_table([result], console_for(stream), phases=9)
    words = " ".join(stream.getvalue().split())
    assert "Talc? 1.8" in words
    assert "Illite 41.3" in words


def test_cautions_of_many_samples(make_result) -> None:
    one, two = (make_result(name, curves=False) for name in ("S1", "S2"))
    fibres = two.model_copy(update={"cautions": (*two.cautions, "Send it for microscopy.")})
    assert cautions_of([one, fibres]) == [one.cautions[0], "Send it for microscopy. (S2)"]
    assert cautions_of([]) == list(GENERAL_CAUTIONS)
