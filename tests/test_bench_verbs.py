"""`plan` and `diagnose` from the command line: documents, tables, refusals."""

import json

import pytest
from sumwright.command import main
from sumwright.engine.operating_point import operating_point
from sumwright.files.design import design_document
from support.bench_stages import broken, stage

DESIGN = stage()


@pytest.fixture
def files(tmp_path):
    design = tmp_path / "design.json"
    design.write_text(json.dumps(design_document(DESIGN)))
    board = broken(DESIGN, "leg open", "west")
    lines = ["north;east;south;west;tare;output;uncertainty"]
    for volts in ([0] * 5, *([10 * (i == k) for i in range(5)] for k in range(5)), [5, 4, 3, 2, 1]):
        cells = [f"{x:g}" for x in (*volts, round(operating_point(board, volts).output, 4), 0.001)]
        lines.append(";".join(cells).replace(".", ","))
    readings = tmp_path / "readings.csv"
    readings.write_text("\n".join(lines))
    return design, readings


def run(capsys, *words):
    status = main([str(w) for w in words])
    out = capsys.readouterr()
    return status, out.out, out.err


def test_plan_document_has_the_contracts_keys(files, capsys):
    status, out, _ = run(capsys, "plan", files[0], "--json")
    steps = json.loads(out)["steps"]
    assert status == 0
    for step in steps:
        assert {"number", "apply", "probe", "expect", "low", "high", "unit", "why", "miss"} <= set(step)
    assert any(step["probe"] == "output" and set(step["apply"]) == set(DESIGN.signal_names) for step in steps)


def test_diagnose_document_has_the_contracts_keys(files, capsys):
    status, out, _ = run(capsys, "diagnose", *files, "--json")
    document = json.loads(out)
    assert status == 0
    fit = document["fit"]
    assert set(fit["weights"]) == set(DESIGN.signal_names)
    assert set(fit["weights"]["north"]) >= {"value", "standard_uncertainty"}
    assert set(fit) >= {"offset", "chi_squared", "degrees_of_freedom", "p_value"}
    assert fit["degrees_of_freedom"] == 1
    assert document["verdicts"]["west"] == "out"
    first = document["suspects"][0]
    assert (first["fault"], first["part"], first["group"]) == ("leg open", "west", 1)
    assert set(first) >= {"probability", "estimate", "explain"}
    assert set(document["next_reading"]) == set(DESIGN.signal_names)


def test_tables_are_for_people(files, capsys):
    status, out, _ = run(capsys, "diagnose", *files)
    assert status == 0
    assert "leg open" in out
    assert "Next reading" in out
    status, out, _ = run(capsys, "plan", files[0], "--meter", "0.5 % + 2 digits of 10 mV")
    assert status == 0
    assert "Caution" in out


@pytest.mark.parametrize(
    ("words", "says"),
    [
        (("--meter", "good"), "meter"), (("--limit", "north"), "NAME=LOW..HIGH"), (("--limit", "nowhere=1..2"), "nowhere"),
        (("--limit", "north=2..1"), "lower"),
    ],
)  # fmt: skip
def test_bad_options_end_with_two_and_one_line(files, capsys, words, says):
    status, out, err = run(capsys, "diagnose", *files, *words)
    assert (status, out) == (2, "")
    assert says in err
    assert err.count("\n") == 1


def test_readings_with_text_in_them_end_with_two(files, capsys):
    files[1].write_text("north,output\n1,two\n")
    status, out, err = run(capsys, "diagnose", *files)
    assert (status, out) == (2, "")
    assert "line 2, column 2 (output)" in err
