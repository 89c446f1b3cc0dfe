"""The fold Report hands out each file once, by its token, and refuses what it does not know."""

import base64
import dataclasses
import io
import zipfile

import numpy as np
import pytest
from sumwright.engine.bench.readings import Readings
from sumwright.errors import SumwrightError
from sumwright.files.examples import example
from sumwright.model.bench_run import BenchRun
from sumwright.model.workbench import Workbench
from sumwright.views.fold import Context
from sumwright.views.report import PICTURES, TABLES, Report, file_stem, make


class Jobs:
    """Does the work at once."""

    def __init__(self):
        self.orders = []

    def start(self, key, function, *args, progress=None, done=None, failed=None):
        self.orders.append(args[-1])
        steps = function(*args)
        try:
            while True:
                next(steps)
        except StopIteration as end:
            done(end.value)
        except SumwrightError as error:
            failed(str(error))

    def stop(self, key):
        pass


@pytest.fixture
def fold():
    frames = []
    context = Context(
        Workbench(example()), Jobs(), lambda: frames.append(1), lambda: None, lambda *a, **k: None, lambda a: None, {}
    )
    it = Report(context)
    it.frames = frames
    return it


def ordered(fold, kind, which="", draws=50):
    fold.handle({"ask": "make", "kind": kind, "which": which, "token": "t1", "draws": draws})
    assert fold.show()["refused"] == "", fold.show()["refused"]
    assert fold.show()["ready"] == "t1"
    reply = fold.handle({"ask": "take", "token": "t1"})
    return reply["name"], reply["type"], base64.b64decode(reply["data"])


def test_each_document_is_made(fold):
    name, kind, data = ordered(fold, "report")
    assert name == "Glasshouse-roof-vent-invented.html" and kind == "text/html" and data.startswith(b"<!doctype html>")
    assert ordered(fold, "bring-up")[2].count(b'<td class="write') > 10
    assert ordered(fold, "summary")[2].startswith(b"# Glasshouse")
    assert zipfile.ZipFile(io.BytesIO(ordered(fold, "bundle")[2])).testzip() is None


@pytest.mark.parametrize("which", [key for key, _ in TABLES])
def test_each_table_is_csv(fold, which):
    name, kind, data = ordered(fold, "table", which)
    assert kind == "text/csv" and name.endswith(".csv")
    assert data.decode("utf-8-sig").count("\r\n") >= 2


@pytest.mark.parametrize("which", [key for key, _ in PICTURES])
def test_each_picture_is_svg(fold, which):
    assert ordered(fold, "picture", which)[2].startswith(b"<?xml")


@pytest.mark.parametrize("which", [key for key, _ in PICTURES])
def test_each_picture_can_be_looked_at_at_once(fold, which):
    stamp = fold.show()["stamp"]
    reply = fold.handle({"ask": "look", "which": which})
    assert reply["look"] == which and reply["stamp"] == stamp
    assert reply["svg"].startswith("<svg") and "var(--ink)" in reply["svg"]
    assert fold.show()["stamp"] == stamp
    fold.workbench.put(example("tide-gauge"))
    assert fold.show()["stamp"] == stamp + 1


def test_a_record_needs_readings_of_this_stage(fold):
    wanted = {"ask": "make", "kind": "record", "which": "", "token": "t", "draws": 0}
    assert fold.handle(wanted) is None and "no readings yet" in fold.show()["refused"]
    assert not fold.show()["making"]  # so the browser closes the tab it opened
    d = fold.workbench.design
    n = len(d.signals)
    volts = np.vstack([np.zeros(n), np.eye(n) * 5.0, np.full(n, 2.0)])
    from sumwright.engine.operating_point import operating_point

    made = operating_point(d)
    output = volts @ made.weights + made.offset
    taken = Readings(d.signal_names, volts, output, np.full(len(output), 2e-4), tuple(range(1, n + 3)))
    fold.context.extras["readings"] = taken
    assert b"all in" in ordered(fold, "record")[2]
    fold.context.extras["readings"] = dataclasses.replace(taken, names=("other",))
    assert fold.handle(wanted) is None and "not those of the readings" in fold.show()["refused"]


def test_readings_saved_with_the_sheet_make_a_record_before_the_bench_is_opened(fold):
    run = BenchRun(fold.workbench.design)
    for i, row in enumerate(run.rows()):
        if row.step.probe == "output" and row.step.unit == "V":
            run.put(i, f"{row.step.expect:.4f}")
    fold.workbench.readings = run.document()
    assert fold.show()["readings"] == run.readings().count > 0
    assert run.meter.text.encode() in ordered(fold, "record")[2]


@pytest.mark.parametrize(
    "message",
    [
        {"ask": "make", "kind": "rubbish", "which": "", "token": "t", "draws": 10},
        {"ask": "make", "kind": "table", "which": "../etc", "token": "t", "draws": 10},
        {"ask": "make", "kind": "report", "which": "", "token": "t" * 60, "draws": 10},
        {"ask": "make", "kind": "report", "which": "", "token": "t", "draws": 10**9},
        {"ask": "make", "kind": "report", "which": "", "token": "t", "draws": "many"},
        {"ask": "take", "token": "nobody's"},
        {"ask": "format the disk"},
        {},
    ],
)
def test_what_a_browser_may_not_ask_is_refused(fold, message):
    with pytest.raises(SumwrightError):
        fold.handle(message)


def test_a_file_is_handed_out_once_and_only_for_its_token(fold):
    fold.handle({"ask": "make", "kind": "summary", "which": "", "token": "a", "draws": 0})
    with pytest.raises(SumwrightError):
        fold.handle({"ask": "take", "token": "b"})
    assert fold.handle({"ask": "take", "token": "a"})["name"].endswith(".md")
    with pytest.raises(SumwrightError):
        fold.handle({"ask": "take", "token": "a"})


def test_a_table_that_is_not_there_says_so(fold):
    fold.workbench.put(example("tide-gauge"))
    fold.handle({"ask": "make", "kind": "table", "which": "cables", "token": "t", "draws": 0})
    assert "does not exist" in fold.show()["refused"]
    assert "cables" not in [key for key, _ in fold.show()["tables"]]


def test_file_names_are_plain():
    assert file_stem('../../etc/passwd "x" <b>') == "etc-passwd-x-b"
    assert file_stem("…") == "sheet"
    assert len(file_stem("a" * 300)) <= 60


def test_the_job_is_a_generator_that_can_be_stopped():
    steps = make(example(), (), {})
    assert next(steps) is None
    steps.close()
