"""`sumwright realise`: the document, the table, the refusals."""

import csv
import json
from pathlib import Path

import pytest
from sumwright.command import main
from sumwright.engine.arrangement import ideal_weights
from sumwright.engine.stage import replace
from sumwright.files.design import design_document, read_design, write_design
from support.wanted import design_for

KEYS = {
    "arrangement",
    "cells",
    "weights",
    "offset",
    "worst_weight_error",
    "resistor_count",
    "op_amp_count",
    "noise_gain",
}


@pytest.fixture
def design(tmp_path):
    d = design_for([2.0, -4.0, 0.7], offset=0.3, series="E24", most=1e5)
    path = tmp_path / "d.json"
    write_design(d, path)
    return d, str(path)


def run(capsys, *words):
    status = main(["realise", *words])
    out, err = capsys.readouterr()
    return status, out, err


def test_json_holds_choices_that_can_be_pasted_into_the_design(design, capsys):
    d, path = design
    status, out, err = run(capsys, path, "--json")
    assert (status, err) == (0, "")
    choices = json.loads(out)["choices"]
    assert [c["worst_weight_error"] for c in choices] == sorted(c["worst_weight_error"] for c in choices)
    assert {c["arrangement"] for c in choices} == {"mixed-sign", "two-stage"}
    for c in choices:
        assert set(c) >= KEYS
        pasted = read_design({**design_document(d), "cells": c["cells"]})
        made, offset = ideal_weights(pasted, pasted.cells)
        assert made == pytest.approx(c["weights"]) and offset == pytest.approx(c["offset"])
        worst = max(*(abs(made[s.name] / s.weight - 1) for s in d.signals), abs(offset / 0.3 - 1))
        assert worst == pytest.approx(c["worst_weight_error"], rel=1e-9, abs=1e-12)


def test_one_arrangement_alone_and_its_refusal(design, capsys):
    _, path = design
    status, out, _ = run(capsys, path, "--arrangement", "two-stage", "--json")
    assert status == 0 and {c["arrangement"] for c in json.loads(out)["choices"]} == {"two-stage"}
    status, out, err = run(capsys, path, "--arrangement", "inverting")
    assert (status, out) == (2, "") and err.count("\n") == 1
    assert "'s0' wants 2" in err and "mixed-sign, two-stage" in err
    status, out, err = run(capsys, path, "--arrangement", "sideways")
    assert status == 2 and "'sideways' is no arrangement" in err


def test_the_table_is_readable(design, capsys):
    _, path = design
    status, out, _ = run(capsys, path)
    assert status == 0
    assert "mixed-sign" in out and "proved" in out and "feedback" in out


def test_from_a_drawer(design, capsys, tmp_path):
    _, path = design
    stock = tmp_path / "stock.csv"
    stock.write_bytes("\ufeffvalue;count\n4,7k;2\n10k;3\n22k;2\n33k;1\n100k;2\n15k;2\n".encode())
    status, out, _ = run(capsys, path, "--stock", str(stock), "--json", "--buy-for", "2%")
    document = json.loads(out)
    assert status == 0 and document["buy"]
    for c in document["choices"]:
        values = [leg["resistance"] for cell in c["cells"] for leg in (*cell["minus"], *cell["plus"])]
        assert set(values) <= {4700, 10000, 22000, 33000, 100000, 15000}
        assert values.count(4700) <= 2
    stock.write_text("value,count\n4k7,-1\n")
    status, out, err = run(capsys, path, "--stock", str(stock))
    assert (status, out) == (2, "") and "Line 2 of the drawer, count" in err


def test_pairs_and_least_input(design, capsys):
    _, path = design
    status, out, _ = run(capsys, path, "--pairs", "--json")
    assert status == 0 and any(c["parts"] for c in json.loads(out)["choices"])
    status, out, _ = run(capsys, path, "--least-input", "s0=47k", "--json")
    for c in json.loads(out)["choices"]:
        legs = {leg["from"]: leg["resistance"] for cell in c["cells"] for leg in (*cell["minus"], *cell["plus"])}
        assert legs["s0"] >= 47e3
    for words in (
        ["--least-input", "s0"],
        ["--least-input", "s0=x"],
        ["--least-input", "nobody=1k"],
        ["--buy-for", "1%"],
        ["--pairs", "--stock", "x"],
    ):
        status, out, err = run(capsys, path, *words)
        assert (status, out) == (2, "") and err.count("\n") == 1


def test_a_weight_of_zero_is_refused(tmp_path, capsys):
    path = tmp_path / "z.json"
    write_design(design_for([1.0, 0.0]), path)
    status, out, err = run(capsys, str(path))
    assert (status, out) == (2, "") and "'s1' is 0" in err


def test_a_realised_design_may_be_realised_again(design, capsys, tmp_path):
    d, path = design
    _, out, _ = run(capsys, path, "--json")
    again = read_design({**design_document(d), "cells": json.loads(out)["choices"][0]["cells"]})
    write_design(again, tmp_path / "again.json")
    status, second, _ = run(capsys, str(tmp_path / "again.json"), "--json")
    assert status == 0 and json.loads(second)["choices"][0] == json.loads(out)["choices"][0]
    assert replace(again, cells=()) == d


def test_the_bill_of_the_best_choice(design, capsys, tmp_path):
    _, path = design
    bill = tmp_path / "bill.csv"
    status, out, _ = run(capsys, path, "--bill", str(bill), "--json")
    assert status == 0
    best = json.loads(out)["choices"][0]
    rows = list(csv.DictReader(bill.read_text().splitlines()))
    assert sum(int(r["count"]) for r in rows if r["part"] == "resistor") == best["resistor_count"]
    status, out, err = run(capsys, path, "--bill", str(tmp_path / "no" / "such" / "place.csv"))
    assert (status, out) == (2, "") and "cannot be written" in err
    status, out, err = run(capsys, path, "--bill", path)
    assert (status, out) == (2, "") and "is read by this command" in err and read_design(Path(path))
