"""Exports carry the engine's numbers unrounded, and nothing that a spreadsheet would run."""

import csv
import io
import json
import re
import xml.etree.ElementTree as ET
import zipfile
from dataclasses import replace
from datetime import UTC, datetime

import pytest
from sumwright.engine.analysis import Analysis
from sumwright.engine.stage import Leg
from sumwright.files.design import read_design
from sumwright.files.examples import example
from sumwright.files.results import to_json
from sumwright.report.contents import all_tables, weights
from sumwright.report.export import bundle, drawings, summary
from sumwright.report.tables import Column, Table, csv_text, markdown

NOON = datetime(2026, 12, 1, 12, 0, tzinfo=UTC)


def named(design, new):
    old = design.signals[0].name
    return replace(
        design, signals=(replace(design.signals[0], name=new), *design.signals[1:]),
        cells=tuple(
            replace(
                c, minus=tuple(Leg(new, leg.resistance) if leg.source == old else leg for leg in c.minus),
                plus=tuple(Leg(new, leg.resistance) if leg.source == old else leg for leg in c.plus),
            )
            for c in design.cells
        ),
    )  # fmt: skip


# OWASP, CSV Injection (from memory): these beginnings make a cell a formula.
@pytest.mark.parametrize("start", ["=", "+", "-", "@", "\t", "\r", "\n"])
def test_a_text_that_would_be_a_formula_is_defused_and_numbers_are_not(start):
    t = Table("x", "x", (Column("name"), Column("v", "V", "fixed")), ((f"{start}cmd|' /C calc'!A0", -1.5), ("fine", 2)))
    rows = list(csv.reader(io.StringIO(csv_text(t), newline="")))
    assert rows[1] == [f"'{start}cmd|' /C calc'!A0", "-1.5"]
    assert rows[2] == ["fine", "2"]


def test_csv_numbers_read_back_to_the_last_bit():
    a = Analysis(example())
    rows = list(csv.DictReader(io.StringIO(csv_text(weights(a)))))
    for row, w in zip(rows, a.dc.weights, strict=False):
        assert float(row["made"]) == w


def test_every_cell_of_every_table_is_a_number_or_a_harmless_text():
    a = Analysis(named(example(), "=HYPERLINK(1)"))
    for table in all_tables(a):
        for row in csv.reader(io.StringIO(csv_text(table), newline="")):
            for cell in row:
                if cell[:1] in "=+@\t\r" and cell:
                    pytest.fail(f"{table.key}: {cell!r}")
                if cell.startswith("-"):
                    float(cell)


def test_the_zip_holds_the_design_the_results_and_every_table_and_picture():
    d = example()
    a = Analysis(d)
    data = bundle(a, draws=100, author="R. Okafor", now=NOON)
    archive = zipfile.ZipFile(io.BytesIO(data))
    assert archive.testzip() is None
    assert read_design(archive.read("design.json")) == d
    results = json.loads(archive.read("results.json"))
    assert results["errors"]["present"]["monte_carlo"]["draws"] == 100
    assert results["dc"] == json.loads(json.dumps(to_json(a)["dc"]))
    assert len([n for n in archive.namelist() if n.startswith("tables/")]) == len(all_tables(a))
    for name in (n for n in archive.namelist() if n.startswith("pictures/")):
        text = archive.read(name).decode()
        root = ET.fromstring(text)
        assert root.find("{http://www.w3.org/2000/svg}title").text
        assert "var(" not in text and not re.search(r"(href|url\(|<script)", text)
    assert data == bundle(a, draws=100, author="R. Okafor", now=NOON)


def test_every_picture_says_its_numbers_in_words():
    for name, picture in drawings(Analysis(example("lock-gate-switches"))).items():
        if name != "key":
            assert re.search(r"\d", picture.alt), name


def test_markdown_cannot_be_broken_out_of():
    t = Table("x", "x", (Column("name"), Column("v", "V", "fixed")), (("a|b\n<img src=x>`*_[y](z)", 1.0),))
    body = markdown(t).splitlines()
    assert len(body) == 3
    assert body[2] == "| a\\|b \\<img src=x\\>\\`\\*\\_\\[y\\](z) | 1.000 |"


def test_the_summary_names_verdict_weights_and_hash():
    a = Analysis(example())
    text = summary(a, "R. Okafor", NOON)
    assert a.checks[0].title in text
    assert re.search(r"`[0-9a-f]{64}`", text)
    assert all(s.name in text for s in a.design.signals)
