"""The report stands alone, says what the engine found, and lets nobody write markup into it."""

import dataclasses
import hashlib
import json
import re
from datetime import UTC, datetime
from html import unescape
from html.parser import HTMLParser

import numpy as np
import pytest
from sumwright.command import main
from sumwright.engine.analysis import Analysis
from sumwright.engine.stage import Leg, replace
from sumwright.files.design import read_design, write_design
from sumwright.files.examples import NAMES, example
from sumwright.files.results import to_json
from sumwright.report.document import Decision, design_report
from support.stages import random_chain

NOON = datetime(2026, 12, 1, 12, 0, tzinfo=UTC)


class Reader(HTMLParser):
    """Elements, attributes and the text of table rows."""

    def __init__(self, text):
        super().__init__()
        self.tags, self.attributes, self.rows, self.open = [], [], {}, []
        self.table, self.row, self.cell = "", None, None
        self.feed(text)

    def handle_starttag(self, tag, attrs):
        self.tags.append(tag)
        self.attributes += attrs
        if tag == "table":
            self.table = dict(attrs).get("id", "")
        elif tag == "tr":
            self.row = []
        elif tag in ("td", "th"):
            self.cell = ""

    def handle_data(self, data):
        if self.cell is not None:
            self.cell += data

    def handle_endtag(self, tag):
        if tag in ("td", "th") and self.cell is not None:
            self.row.append(self.cell)
            self.cell = None
        elif tag == "tr":
            self.rows.setdefault(self.table, []).append(self.row)


def report(design, **more):
    return design_report(Analysis(design), now=NOON, author="R. Okafor", **{"draws": 200, **more})


@pytest.mark.parametrize("name", NAMES)
def test_it_is_one_file_with_no_script_and_no_reference_outside(name):
    text = report(example(name))
    page = Reader(text)
    assert not {"script", "link", "iframe", "object", "embed", "img", "base", "form"} & set(page.tags)
    assert not [
        a for a in page.attributes if a[0] in ("href", "src", "srcset", "action", "style") or a[0].startswith("on")
    ]
    assert [v for k, v in page.attributes if v and "//" in v and k != "xmlns"] == []
    style = re.search(r"<style>(.*?)</style>", text, re.S)[1]
    assert "url(" not in style and "@import" not in style and "//" not in style


def test_any_chain_makes_a_report():
    rng = np.random.default_rng(9)
    for _ in range(6):
        page = Reader(report(random_chain(rng), draws=0))
        assert len(page.rows["t-weights"]) > 1
        assert "None" not in [c for rows in page.rows.values() for r in rows for c in r]


def test_its_tables_hold_the_engines_numbers():
    d = example()
    analysis = Analysis(d)
    found = to_json(analysis)
    rows = Reader(report(d)).rows

    def figure(text):
        return float(text.replace("−", "-").replace("+", ""))

    weights = {r[0]: r for r in rows["t-weights"]}
    for name, made in found["dc"]["weights"].items():
        assert figure(weights[name][2]) == pytest.approx(made, abs=5.1e-6)
        assert figure(weights[name][4]) == pytest.approx(found["dc"]["contributions"][name], abs=5.1e-5)
    for row, point in zip(rows["t-errors"][1:], ("present", "highest", "lowest"), strict=True):
        e = found["errors"][point]
        unit = {"m": 1e-3, "µ": 1e-6, "V": 1.0}
        for column, key in ((2, "shift"), (3, "expanded_95"), (4, "worst_case")):
            scale = unit[rows["t-errors"][0][column].split(", ")[1][0]]
            assert figure(row[column]) * scale == pytest.approx(e[key], rel=2e-3, abs=1e-3 * scale * 6)
    for row, cell in zip(rows["t-loops"][1:], found["ac"]["cells"], strict=True):
        assert figure(row[3]) == pytest.approx(cell["phase_margin"], abs=0.051)
    margins = [r[0] for r in rows[""][1:]]
    assert margins == [c["title"] for c in found["checks"]]


def test_the_design_printed_in_it_is_the_design_and_its_hash_is_at_the_head():
    d = example("tide-gauge")
    text = report(d)
    printed = unescape(re.search(r"<pre>(.*?)</pre>", text, re.S)[1])
    assert read_design(printed.encode()) == d
    assert hashlib.sha256(write_design(d).encode()).hexdigest() in text
    assert hashlib.sha256(printed.encode()).hexdigest() in text


def test_the_same_design_at_the_same_time_gives_the_same_file():
    assert report(example()) == report(example())


def test_texts_of_people_stay_texts():
    evil = '"><script>alert(1)</script><img src=x onerror=alert(2)>'
    d = example("village-hall-bus")
    first = d.signals[0].name
    d = dataclasses.replace(
        d, title=f"{evil} & co", signals=(replace(d.signals[0], name="<b onx=1>hall"), *d.signals[1:]),
        op_amp=replace(d.op_amp, name=evil),
        cells=tuple(replace(c, minus=tuple(Leg("<b onx=1>hall", leg.resistance) if leg.source == first else leg for leg in c.minus)) for c in d.cells),
    )  # fmt: skip
    text = design_report(Analysis(d), author=evil, now=NOON, draws=100, decisions=[Decision(evil, evil, evil)])
    page = Reader(text)
    assert not {"script", "img", "b onx"} & set(page.tags)
    assert not [a for a in page.attributes if a[0].startswith("on")]
    assert evil in unescape(text)


def test_cautions_and_what_is_not_in_the_model_are_said():
    text = report(example())
    assert "Not for protection, medical" in text
    assert "licensed practice" in text
    assert "Not in the model" in text


def test_decisions_are_listed_when_given():
    said = report(example(), decisions=[Decision("2026-11-30", "I. Maro", "Take 0.1 % parts.")])
    assert "Take 0.1 % parts." in said and "I. Maro" in said
    assert "<h2>Decisions</h2>" not in report(example())


def test_a_comparator_makes_a_report_whose_figures_stay_readable():
    design = example()
    text = report(replace(design, cells=tuple(replace(c, feedback=None) for c in design.cells)))
    read = Reader(text)
    assert re.search(r"\d\skV", text), "its linear extremes are no volts with three decimals"
    assert all(len(re.sub(r"\D", "", cell)) <= 9 for row in read.rows["t-weights"] for cell in row[1:])


def test_signals_without_a_range_make_a_report_without_a_step():
    design = example()
    still = replace(design, signals=tuple(replace(s, low=s.value, high=s.value) for s in design.signals))
    assert "Step of" not in report(still) and "Step of" in report(design)


def test_both_symbol_standards():
    assert "IEEE 315" in report(example(), symbols="ieee", draws=0)
    assert "IEC 60617" in report(example(), draws=0)


# The command -----------------------------------------------------------------------------------------


@pytest.fixture
def design_file(tmp_path):
    path = tmp_path / "vent.json"
    path.write_text(write_design(example()), encoding="utf-8")
    return path


def test_the_verb_writes_the_file_and_exits_0(design_file, tmp_path, capsys):
    out = tmp_path / "vent.html"
    assert main(["report", str(design_file), "-o", str(out), "--draws", "100", "--author", "R. Okafor"]) == 0
    assert out.read_text(encoding="utf-8").startswith("<!doctype html>")
    assert "R. Okafor" in out.read_text(encoding="utf-8")
    assert capsys.readouterr().err == ""


@pytest.mark.parametrize("spoil", ["missing", "not json", "wrong key", "not realised", "draws"])
def test_bad_input_exits_2_with_one_line_and_writes_nothing(design_file, tmp_path, capsys, spoil):
    out = tmp_path / "kept.html"
    out.write_text("the earlier report", encoding="utf-8")
    document = json.loads(design_file.read_text(encoding="utf-8"))
    more = []
    if spoil == "missing":
        design_file.unlink()
    elif spoil == "not json":
        design_file.write_text("{", encoding="utf-8")
    elif spoil == "wrong key":
        design_file.write_text(json.dumps(document | {"colour": 1}), encoding="utf-8")
    elif spoil == "not realised":
        del document["cells"]
        design_file.write_text(json.dumps(document), encoding="utf-8")
    else:
        more = ["--draws", "-3"]
    assert main(["report", str(design_file), "-o", str(out), *more]) == 2
    err = capsys.readouterr().err
    assert err.count("\n") == 1 and err.startswith("sumwright: ")
    assert out.read_text(encoding="utf-8") == "the earlier report"
    assert [p.name for p in tmp_path.iterdir() if p.name.startswith(".")] == []


@pytest.mark.parametrize("outputs", [("design",), ("link",), ("new", "new"), ("new", "no/such.zip")])
def test_no_output_replaces_what_is_read_or_is_half_of_what_was_asked(design_file, tmp_path, capsys, outputs):
    before = design_file.read_bytes()
    link = tmp_path / "link"
    link.symlink_to(design_file)
    places = [str({"design": design_file, "link": link}.get(o, tmp_path / o)) for o in outputs]
    words = ["-o", places[0], *(("--bundle", places[1]) if len(places) > 1 else ())]
    assert main(["report", str(design_file), *words, "--draws", "0"]) == 2
    err = capsys.readouterr().err
    assert err.count("\n") == 1 and ("name another file" in err or "cannot be written" in err)
    assert design_file.read_bytes() == before and link.is_symlink() and not (tmp_path / "new").exists()


def test_a_folder_that_is_not_there_is_named(design_file, tmp_path, capsys):
    assert main(["report", str(design_file), "-o", str(tmp_path / "no" / "x.html"), "--draws", "0"]) == 2
    assert "cannot be written" in capsys.readouterr().err
