"""`pole`, `stage`, `compare`, `draws`, `check`: names, numbers, exit codes, what goes where."""

import json
import math

import numpy as np
import pytest
from command_line.world import DEMO, HISTORY, KNOWN, in_a_process

POLE = [
    *("plate", "relative_to", "age_ma", "pole_lat_deg", "pole_lon_deg", "angle_deg"),
    *("quaternion_wxyz", "covariance_rad2", "ledger"),
]
STAGE = [
    *("plate", "relative_to", "from_age_ma", "to_age_ma", "coordinates"),
    *("pole_lat_deg", "pole_lon_deg", "angle_deg", "rate_deg_per_myr"),
    *("quaternion_wxyz", "covariance_rad2", "ledger"),
]
ALBA = ("alba", "--relative-to", "deep", "--history")
BORA = ("bora", "--relative-to", "alba", "--history")
DEGREE_KM = math.pi / 180.0 * 6371.0088


def record(answer):
    assert (answer.code, answer.err) == (0, "")
    return json.loads(answer.out)


def test_pole_as_json(ask):
    """A finite pole is given as its pole, angle, quaternion and ledger, named as agreed."""
    found = record(ask("pole", *ALBA, "history.csv", "--age", "5", "--json"))
    assert [name for name in found if name in POLE] == POLE
    assert (found["plate"], found["relative_to"], found["age_ma"]) == ("alba", "deep", 5.0)
    assert found["pole_lat_deg"] == pytest.approx(90.0, abs=1e-12)
    assert found["angle_deg"] == pytest.approx(5.0, abs=1e-12)
    half = math.radians(2.5)
    assert found["quaternion_wxyz"] == pytest.approx([math.cos(half), 0, 0, math.sin(half)], abs=1e-15)
    assert (found["latitudes"], found["errors"]) == ("as-given", "error of rows only")
    (link,) = found["ledger"]
    assert (link["plate"], link["relative_to"], link["fraction"]) == ("alba", "deep", 0.5)
    assert [(link[side]["file"], link[side]["line"]) for side in ("younger", "older")] == [
        ("history.csv", 2),
        ("history.csv", 3),
    ]


def test_what_is_not_known_is_null(ask):
    """Without covariances nothing is said of errors: null, never zero."""
    found = record(ask("pole", *ALBA, "history.csv", "--age", "5", "--json"))
    unknown = ["covariance_rad2", "pole_ellipse_major_deg", "angle_sigma_deg", "dof"]
    assert [found[name] for name in unknown] == [None] * 4
    assert found["ledger"][0]["older"]["variance_share"] is None


def test_a_zero_rotation_has_no_pole(ask):
    """At 0 Ma the angle is 0, the pole null, the covariance exactly zero."""
    found = record(ask("pole", *ALBA, "known.csv", "--age", "0", "--json"))
    assert (found["pole_lat_deg"], found["pole_lon_deg"], found["angle_deg"]) == (None, None, 0.0)
    assert found["quaternion_wxyz"] == [1.0, 0.0, 0.0, 0.0]
    assert found["covariance_rad2"] == [[0.0] * 3] * 3
    assert ask("pole", *ALBA, "known.csv", "--age", "0").out.startswith(
        "alba relative to deep, today to 0 Ma: zero rotation, no pole"
    )


def test_the_covariance_of_a_row_comes_out_as_published(ask):
    """At a row's age the covariance is `matrix * factor / kappa`, with that row's dof behind it."""
    found = record(ask("pole", *ALBA, "known.csv", "--age", "10", "--json"))
    expected = np.diag([4.0, 6.0, 8.0]) * 1e-6 / 2.0
    np.testing.assert_allclose(found["covariance_rad2"], expected, atol=1e-20)
    assert found["dof"] == pytest.approx(20.0, rel=1e-9)
    # the pole stands at 90N: its axis is z, so the angle has the variance of the last entry
    assert found["angle_sigma_deg"] == pytest.approx(math.degrees(math.sqrt(4e-6)), rel=1e-9)


def test_pole_in_words(ask):
    """Without --json: the pole in one line, then the chain with its rows and where they stand."""
    answer = ask("pole", *ALBA, "known.csv", "--age", "10")
    assert (answer.code, answer.err) == (0, "")
    lines = answer.out.splitlines()
    assert lines[0].startswith(
        "alba relative to deep, today to 10 Ma: pole 90.000000 0.000000, angle 10.000000 deg"
    )
    assert lines[0].endswith("(error of rows only)")
    assert any("known.csv:3: 100.0% of the variance" in line for line in lines)
    assert any("Log 7" in line for line in lines)


def test_beyond_the_oldest_row(ask):
    """An age past the rows is refused, held or extended, as asked; refused is the default."""
    refused = ask("pole", *ALBA, "history.csv", "--age", "50", "--json")
    assert (refused.code, refused.out) == (1, "")
    assert refused.err == (
        "error: alba relative to deep at 50 Ma: outside the history; the chain holds at 0..40 Ma\n"
    )
    for beyond, angle in (("hold", 40.0), ("extend", 50.0)):
        answer = ask("pole", *ALBA, "history.csv", "--age", "50", "--beyond", beyond, "--json")
        assert record(answer)["angle_deg"] == pytest.approx(angle, abs=1e-10)


def test_stage_as_json(ask):
    """A stage goes from the older to the younger age and says in whose coordinates its pole is."""
    found = record(ask("stage", *BORA, "history.csv", "--from", "20", "--to", "10", "--json"))
    assert [name for name in found if name in STAGE] == STAGE
    assert (found["from_age_ma"], found["to_age_ma"], found["coordinates"]) == (20.0, 10.0, "alba")
    assert abs(found["pole_lat_deg"]) < 1e-12
    assert abs(found["pole_lon_deg"]) == pytest.approx(180.0, abs=1e-12)
    assert found["angle_deg"] == pytest.approx(5.0, abs=1e-12)
    assert found["rate_deg_per_myr"] == pytest.approx(0.5, abs=1e-13)
    assert found["covariance_rad2"] is None
    assert [link["age_ma"] for link in found["ledger"]] == [20.0, 10.0]


@pytest.mark.parametrize(
    ("coordinates", "said", "lon"),
    [("plate", "bora", 180.0), ("deep", "deep", -170.0), ("alba", "alba", 180)],
)
def test_stages_in_other_coordinates(ask, coordinates, said, lon):
    """`alba` stood turned by 10 degrees in `deep` at 10 Ma, and the pole with it."""
    stage = ("stage", *BORA, "history.csv", "--from", "20", "--to", "10", "--json")
    found = record(ask(*stage, "--coordinates", coordinates))
    assert found["coordinates"] == said
    assert math.remainder(found["pole_lon_deg"] - lon, 360.0) == pytest.approx(0.0, abs=1e-10)


def test_a_stage_the_wrong_way_round_is_a_misuse(ask):
    """--from is the older age; equal ages are no stage either."""
    for ages in (("10", "20"), ("10", "10")):
        answer = ask("stage", *ALBA, "history.csv", "--from", ages[0], "--to", ages[1])
        assert (answer.code, answer.out) == (2, "")
        assert answer.said == [
            f"error: --from {ages[0]} --to {ages[1]}: --from is the older age",
            "usage: oncewhere stage --help",
        ]


def test_compare(here, ask):
    """Two histories: the angle between their rotations, the greatest distance, the probability."""
    (here / "other.csv").write_text(KNOWN.replace("10,90,0,10", "10,90,0,10.1"), encoding="utf-8")
    ages = ("--age", "10", "--with", "other.csv", "--json")
    found = record(ask("compare", *ALBA, "known.csv", *ages))
    names = ["plate", "relative_to", "age_ma", "angle_deg", "greatest_km"]
    assert list(found) == [*names, "statistic", "probability", "dof"]
    assert found["angle_deg"] == pytest.approx(0.1, abs=1e-10)
    assert found["greatest_km"] == pytest.approx(0.1 * DEGREE_KM, abs=1e-6)
    # two independent angles, variance 8e-6 / 2 each
    assert found["statistic"] == pytest.approx(math.radians(0.1) ** 2 / 8e-6, rel=1e-8)
    assert 0.0 < found["probability"] < 1.0


def test_compare_where_an_error_is_not_known(ask):
    """Without covariances the difference is given and its significance is null."""
    ages = ("--age", "10", "--with", "known.csv")
    found = record(ask("compare", *ALBA, "history.csv", *ages, "--json"))
    assert (found["angle_deg"], found["statistic"], found["probability"]) == (0.0, None, None)
    assert "cannot be said: an error is not known" in ask("compare", *ALBA, "history.csv", *ages).out


def test_draws(here, ask):
    """Drawn histories are whole files that other commands take, the same for the same seed."""
    for folder, seed in (("one", "3"), ("again", "3"), ("other", "4")):
        answer = ask("draws", "known.csv", "--count", "2", "--seed", seed, "--out", folder)
        assert (answer.code, answer.out, answer.err) == (0, "", f"2 histories in {folder}\n")
        assert sorted(p.name for p in (here / folder).iterdir()) == ["draw-001.nc", "draw-002.nc"]
    angles = [
        record(ask("pole", *ALBA, f"{folder}/draw-001.nc", "--age", "10", "--json"))["angle_deg"]
        for folder in ("one", "again", "other")
    ]
    assert angles[0] == angles[1] != angles[2]
    assert abs(angles[0] - 10.0) < 1.0


def test_draws_say_which_rows_cannot_be_drawn(here, ask):
    """Rows without covariance stay as they are in each draw, and that is said."""
    answer = ask("draws", "history.csv", "--count", "1", "--out", "drawn")
    assert answer.code == 0
    assert answer.said[0].startswith("warning: history.csv:3: 11 of 19 rows have no covariance")
    assert answer.said[1] == "1 history in drawn"
    again = ask("draws", "history.csv", "--count", "1", "--out", "drawn")
    assert (again.code, again.said) == (1, ["error: drawn: is there already; name a new folder"])


def test_check_of_a_clean_history(ask):
    """Nothing found: nothing on standard output, the counts on standard error, exit 0."""
    answer = ask("check", "known.csv")
    assert (answer.code, answer.out, answer.err) == (0, "", "0 errors, 0 warnings, 0 notes\n")
    assert ask("check", "known.csv", "--json").out == "[]\n"
    assert ask("check", str(DEMO / "demo.toml")).code == 0


def test_check_as_json(here, ask):
    """Findings are records with the names agreed; warnings alone do not fail."""
    answer = ask("check", "history.csv", "--json")
    assert answer.code == 0
    findings = json.loads(answer.out)
    names = {"severity", "kind", "file", "line", "what", "km", "remedy"}
    assert findings
    assert all(names <= set(found) for found in findings)
    (twin,) = (found for found in findings if found["kind"] == "two chains")
    assert (twin["severity"], twin["file"], twin["line"]) == ("warning", "history.csv", 16)
    assert twin["km"] > 500.0
    unreached = {found["line"] for found in findings if found["kind"] == "no chain"}
    assert unreached == {19}


def test_check_fails_on_errors(here, ask):
    """A row at fault is an error: exit 1, its line on standard output, the counts beside it."""
    (here / "bad.csv").write_text(HISTORY.replace("alba,deep,10,90", "alba,deep,10,95"), encoding="utf-8")
    answer = ask("check", "bad.csv")
    assert (answer.code, answer.err) == (1, "1 error, 0 warnings, 0 notes\n")
    assert answer.out == "error: bad.csv:3:4: pole_lat_deg = 95; a latitude must lie in -90..90\n"
    (found,) = json.loads(ask("check", "bad.csv", "--json").out)
    assert (found["severity"], found["line"], found["column"], found["km"]) == ("error", 3, 4, None)


def test_a_plate_called_na(ask):
    """NA is a label, not a missing value."""
    found = record(
        ask("pole", "NA", "--relative-to", "deep", "--history", "history.csv", "--age", "5", "--json")
    )
    assert found["plate"] == "NA"
    assert (found["pole_lat_deg"], found["angle_deg"]) == (-90.0, pytest.approx(10.0, abs=1e-12))


@pytest.mark.parametrize(
    ("plate", "frame", "message"),
    [
        ("alab", "deep", "plate 'alab' is not in the history; did you mean 'alba'?"),
        ("Alba", "deep", "plate 'Alba' is not in the history; did you mean 'alba'?"),
        ("alba", "depe", "frame 'depe' is not in the history; did you mean 'deep'?"),
        ("isla", "deep", "isla relative to deep at 5 Ma: no chain of pairs leads from isla to deep at any age"),
        ("gapa", "deep", "gapa relative to deep at 15 Ma: gap in history; the chain holds at 0..10, 20..30 Ma"),
    ],
)  # fmt: skip
def test_questions_without_an_answer(ask, plate, frame, message):
    """A plate, a frame or an age that the history lacks: one line, exit 1, nothing on output."""
    age = "15" if plate == "gapa" else "5"
    answer = ask("pole", plate, "--relative-to", frame, "--age", age, "--history", "history.csv")
    assert (answer.code, answer.out, answer.said) == (1, "", [f"error: {message}"])


def test_two_chains_are_both_named(ask):
    """Chains that differ are refused with their size and both ways."""
    answer = ask("pole", "twin", "--relative-to", "deep", "--age", "5", "--history", "history.csv")
    assert (answer.code, answer.out) == (1, "")
    (line,) = answer.said
    assert "two chains from twin differ by up to" in line
    assert "twin > fara > deep and twin > deep" in line


MISUSES = [
    (["pole", "alba"], "Missing option '--relative-to'."),
    (["pole", *ALBA, "history.csv"], "Missing option '--age'."),
    (
        ["pole", *ALBA, "history.csv", "--age", "-5"],
        "'-5': an age is finite, in Ma, positive into the past",
    ),
    (["pole", *ALBA, "history.csv", "--age", "ten"], "'ten' is not a number"),
    (["pole", *ALBA, "history.csv", "--age", "inf"], "'inf': an age is finite"),
    (["pole", *ALBA, "history.csv", "--age", "5", "--beyond", "stop"], "'refuse', 'hold', 'extend'"),
    (["draws", "known.csv", "--count", "0", "--out", "d"], "0 is not in the range x>=1"),
    (["sitse", "x.csv"], "no command 'sitse'; did you mean 'sites'?"),
    (["pole", "--agee", "5"], "No such option '--agee'"),
]


@pytest.mark.parametrize(("args", "message"), MISUSES)
def test_misuses(ask, args, message):
    """A command that is misused ends with 2, one line on what is wrong and one on where to look."""
    answer = ask(*args)
    assert (answer.code, answer.out) == (2, "")
    assert len(answer.said) == 2
    assert answer.said[0].startswith("error: ")
    assert message in answer.said[0]
    assert answer.said[1].startswith("usage: oncewhere")


def test_without_a_command_the_help_is_shown(ask):
    """`oncewhere` alone shows what there is, and counts as a misuse."""
    answer = ask()
    assert (answer.code, answer.out) == (2, "")
    assert answer.err.startswith("Usage: oncewhere")
    assert "error" not in answer.said[0]


def test_real_processes(here):
    """`python -m restore` is the command: output, messages and codes 0, 1 and 2 reach the shell."""
    good = in_a_process("pole", *ALBA, "history.csv", "--age", "5", "--json")
    assert (good.code, good.err) == (0, "")
    assert json.loads(good.out)["plate"] == "alba"
    outside = in_a_process("pole", *ALBA, "history.csv", "--age", "99")
    assert (outside.code, outside.out) == (1, "")
    assert outside.err.startswith("error: alba relative to deep at 99 Ma: outside the history")
    misused = in_a_process("pole", "alba")
    assert (misused.code, misused.out) == (2, "")
    version = in_a_process("--version")
    assert (version.code, version.err) == (0, "")
    assert version.out.startswith("oncewhere, version ")


def test_debug_shows_the_traceback(here):
    """Only --debug shows where in the code an error arose."""
    answer = in_a_process(
        "pole", "alab", "--relative-to", "deep", "--history", "history.csv", "--age", "5", "--debug"
    )
    assert answer.code == 1
    assert "Traceback" in answer.err
    assert "UnknownPlateError" in answer.err
