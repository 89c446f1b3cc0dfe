"""The `sumwright` command as a process of its own: what it prints, and how it ends."""

import json
import math
import os
import subprocess
import sys
from pathlib import Path

import pytest
from sumwright.engine.analysis import Analysis
from sumwright.engine.stage import replace
from sumwright.files.design import design_document, write_design
from sumwright.files.examples import NAMES, example
from sumwright.files.results import to_json

# model: `sumwright analyse --json`, the keys promised
KEYS = {
    "dc": {"output", "unclipped_output", "ideal_output", "clipped", "offset", "weights", "wanted_weights", "contributions",
           "source_currents", "cells"},
    "dc.cells": {"minus_voltage", "plus_voltage", "output_voltage", "output_current", "feedback_current", "leg_currents"},
    "headroom": {"corner_high", "corner_low", "cells"},
    "headroom.cells": {"highest", "lowest", "limit_high", "limit_low", "margin_high", "margin_low",
                       "common_mode_margin_high", "common_mode_margin_low", "output_current_peak"},
    "errors": {"present", "highest", "lowest"},
    "errors.present": {"terms", "shift", "worst_case", "expanded_95", "monte_carlo"},
    "errors.present.terms": {"name", "source", "limit_effect", "standard_uncertainty"},
    "ac": {"signals", "cells", "full_power_bandwidth"},
    "ac.cells": {"noise_gain", "crossover", "phase_margin", "gain_margin_db"},
    "noise": {"density_1khz", "rms", "band", "terms"},
    "noise.terms": {"name", "rms"},
    "power": {"resistors", "op_amps"},
    "power.resistors": {"name", "dissipation_most", "rating"},
    "power.op_amps": {"dissipation_most", "junction"},
    "checks": {"key", "title", "status", "value", "limit", "margin", "unit", "advice"},
}  # fmt: skip


def run(*words, **options):
    """The command with these words; nothing of ours is imported into this process by it."""
    return subprocess.run(
        [sys.executable, "-m", "sumwright.command", *map(str, words)],
        capture_output=True, text=True, check=False, encoding="utf-8", **options,
    )  # fmt: skip


def refused(done):
    """The one line of a refusal."""
    assert done.returncode == 2
    assert done.stdout == ""
    lines = done.stderr.splitlines()
    assert len(lines) == 1 and lines[0].startswith("sumwright: "), done.stderr
    return lines[0]


@pytest.fixture
def design(tmp_path):
    path = tmp_path / "vent.json"
    write_design(example(), path)
    return path


def at(document, path):
    for key in path.split("."):
        document = document[key] if isinstance(document, dict) else document[0][key]
    return document


@pytest.mark.parametrize("name", NAMES)
def test_the_json_document_has_the_keys_promised_and_no_other(tmp_path, name):
    path = tmp_path / "design.json"
    write_design(example(name), path)
    done = run("analyse", path, "--json")
    assert (done.returncode, done.stderr) == (0, "")
    document = json.loads(done.stdout)
    assert set(document) == {"dc", "headroom", "errors", "ac", "noise", "power", "checks"}
    for place, keys in KEYS.items():
        found = at(document, place)
        for record in found if isinstance(found, list) else [found]:
            assert set(record) == keys, place
    signals = set(example(name).signal_names)
    for place in (
        "dc.weights",
        "dc.wanted_weights",
        "dc.contributions",
        "dc.source_currents",
        "headroom.corner_high",
        "ac.signals",
    ):
        assert set(at(document, place)) == signals
    assert document["errors"]["present"]["monte_carlo"] is None
    assert {c["status"] for c in document["checks"]} <= {"clear", "tight", "short", "unknown"}


def test_the_command_gives_the_engines_numbers_to_the_last_bit(design):
    document = json.loads(run("analyse", design, "--json").stdout)
    assert document == json.loads(json.dumps(to_json(Analysis(example()))))


def test_contributions_and_offset_add_up_to_the_output(design):
    dc = json.loads(run("analyse", design, "--json").stdout)["dc"]
    assert math.fsum([dc["offset"], *dc["contributions"].values()]) == pytest.approx(dc["unclipped_output"], rel=1e-14)


def test_drawn_boards_are_repeatable_and_seeded(design):
    def drawn(*words):
        return json.loads(run("analyse", design, "--json", *words).stdout)["errors"]

    first = drawn("--draws", 2000, "--seed", 7)
    assert first == drawn("--draws", 2000, "--seed", 7)
    assert first != drawn("--draws", 2000, "--seed", 8)
    for point in first.values():
        found = point["monte_carlo"]
        assert set(found) == {"draws", "seed", "mean", "standard_deviation", "low_95", "high_95", "yield"}
        assert (found["draws"], found["seed"]) == (2000, 7)
        assert found["low_95"] < found["mean"] < found["high_95"]
        assert found["standard_deviation"] == pytest.approx(point["expanded_95"] / 2, rel=0.1)


def test_the_tables_are_for_people(design):
    done = run("analyse", design, "--draws", 500)
    assert (done.returncode, done.stderr) == (0, "")
    for said in (
        "Glasshouse roof vent",
        "Swing to + rail",
        "tight",
        "ridge",
        "cell 1",
        "yield",
        "phase margin",
        "junction",
    ):
        assert said in done.stdout
    assert "nan" not in done.stdout and "None" not in done.stdout


def test_a_design_that_does_not_move_has_tables_too(tmp_path):
    still = replace(example(), signals=tuple(replace(s, low=1.0, high=1.0, value=1.0) for s in example().signals))
    path = tmp_path / "still.json"
    write_design(still, path)
    done = run("analyse", path)
    assert (done.returncode, done.stderr) == (0, "")
    document = json.loads(run("analyse", path, "--json").stdout)
    assert document["ac"]["full_power_bandwidth"] is None


def test_an_open_loop_is_a_comparator_and_not_a_crash(tmp_path):
    cell = replace(example().cells[0], feedback=None, feedback_capacitance=0.0)
    path = tmp_path / "open.json"
    write_design(replace(example(), cells=(cell,)), path)
    done = run("analyse", path, "--json")
    assert (done.returncode, done.stderr) == (0, "")
    document = json.loads(done.stdout)
    assert document["dc"]["clipped"] in ("high", "low")
    assert document["ac"]["cells"][0]["phase_margin"] is None
    assert run("analyse", path).returncode == 0


def test_strict_ends_with_1_only_when_a_check_falls_short(tmp_path, design):
    assert run("analyse", design, "--strict").returncode == 0
    hot = example()
    hot = replace(hot, supply=replace(hot.supply, high=5.0, low=-5.0))
    path = tmp_path / "short.json"
    write_design(hot, path)
    done = run("analyse", path, "--strict", "--json")
    assert done.returncode == 1
    assert any(c["status"] == "short" for c in json.loads(done.stdout)["checks"])
    assert run("analyse", path).returncode == 0


# Bad input ------------------------------------------------------------------------------------------


def test_files_that_cannot_be_read_are_one_line_each(tmp_path):
    assert "does not exist" in refused(run("analyse", tmp_path / "none.json"))
    assert "is a folder" in refused(run("analyse", tmp_path))
    empty = tmp_path / "empty.json"
    empty.touch()
    assert "empty" in refused(run("analyse", empty))
    assert str(empty) in refused(run("analyse", empty))


def test_a_bad_design_names_file_key_value_and_what_is_allowed(tmp_path):
    document = design_document(example())
    document["signals"][2]["weight"] = "heavy"
    path = tmp_path / "bad.json"
    path.write_text(json.dumps(document))
    line = refused(run("analyse", path, "--json"))
    for said in ("bad.json", "signals[2].weight", '"heavy"', "must be a finite number in V/V"):
        assert said in line


def test_a_design_that_is_not_realised_says_what_to_run(tmp_path):
    path = tmp_path / "wanted.json"
    write_design(replace(example(), cells=()), path)
    assert "sumwright realise" in refused(run("analyse", path))


def test_hostile_names_do_not_reach_the_terminal(tmp_path):
    document = design_document(example())
    document["signals"][0]["name"] = "\x1b[2Jgone\nsecond line"
    path = tmp_path / "bad.json"
    path.write_text(json.dumps(document))
    line = refused(run("analyse", path))
    assert line.isprintable() and "\\u001b" in line


@pytest.mark.parametrize(
    ("words", "says"),
    [
        ((), "VERB"), (("fry",), "fry"), (("analyse",), "DESIGN"), (("analyse", "{}", "--fast"), "--fast"),
        (("analyse", "{}", "--draws", "1"), "--draws"), (("analyse", "{}", "--draws", "many"), "whole number"),
        (("analyse", "{}", "--draws", "-5"), "--draws"), (("analyse", "{}", "--draws", "1e3"), "whole number"),
        (("analyse", "{}", "--draws", "9" * 30), "--draws"), (("analyse", "{}", "--seed", "3"), "--draws"),
        (("analyse", "{}", "--draws", "10", "--seed", "-3"), "--seed"), (("analyse", "{}", "--draws"), "--draws"),
        (("analyse", "{}", "{}"), "unrecognized"), (("analyse", "{}", "--stri"), "--stri"),
    ],
)  # fmt: skip
def test_words_the_command_does_not_know_are_refused(design, words, says):
    assert says in refused(run(*(str(design) if word == "{}" else word for word in words)))


def test_help_and_version_end_well():
    for words in (("--help",), ("analyse", "--help"), ("--version",)):
        done = run(*words)
        assert done.returncode == 0 and "sumwright" in done.stdout


def test_an_output_closed_early_is_no_fault_to_speak_of(design):
    command = f'"{sys.executable}" -m sumwright.command analyse "{design}" --json | true; exit ${{PIPESTATUS[0]}}'
    done = subprocess.run(["bash", "-c", command], capture_output=True, text=True, check=False)
    assert done.returncode == 2
    assert done.stderr == ""  # the reader had enough, as head has


def test_a_full_disk_is_one_line(design):
    full = Path("/dev/full")
    if not full.exists():
        pytest.fail("this test needs /dev/full; run it on Linux")
    with full.open("w") as out:
        done = subprocess.run(
            [sys.executable, "-m", "sumwright.command", "analyse", str(design)],
            stdout=out, stderr=subprocess.PIPE, text=True, check=False,
        )  # fmt: skip
    assert done.returncode == 2
    assert done.stderr.splitlines() == ["sumwright: No space left on device."]


@pytest.mark.parametrize(
    "words, status, error",
    [
        ("analyse '{}' >&-", 2, ["sumwright: Standard output is closed."]), ("report '{}' -o '{}.html' >&-", 0, []),
        ("analyse nowhere.json 2>&-", 2, []),
    ],
)  # fmt: skip
def test_streams_that_were_closed_before_it_began(design, words, status, error):
    command = f'"{sys.executable}" -m sumwright.command {words.format(design, design)}'
    done = subprocess.run(["bash", "-c", command], capture_output=True, text=True, check=False)
    assert (done.returncode, done.stdout, done.stderr.splitlines()) == (status, "", error)


def test_a_terminal_without_unicode_gets_question_marks_not_a_crash(design):
    done = run("analyse", design, env={**os.environ, "PYTHONIOENCODING": "ascii", "PYTHONUTF8": "0"})
    assert (done.returncode, done.stderr) == (0, "")
    assert "?" in done.stdout
