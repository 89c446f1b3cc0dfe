"""The design file: exact both ways, and every bad one refused by the path of its key."""

import copy
import json
import math
import os
import stat
from concurrent.futures import ThreadPoolExecutor
from functools import reduce

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from sumwright.engine.stage import Cell, Leg, Load, Reference, replace
from sumwright.errors import InvalidDesign, SumwrightError
from sumwright.files.design import design_document, read_design, write_design
from sumwright.files.examples import NAMES, example, example_text

DOCUMENT = json.loads(example_text(NAMES[0]))
TWO_CELLS = json.loads(example_text("lock-gate-switches"))


def changed(path, value, document=DOCUMENT):
    """A copy of a good document with one place changed; a value of `...` takes the key out."""
    new = copy.deepcopy(document)
    at = new
    for key in path[:-1]:
        at = at[key]
    if value is ...:
        del at[path[-1]]
    else:
        at[path[-1]] = value
    return new


def refusal(source):
    with pytest.raises(InvalidDesign) as found:
        read_design(source)
    sentence = str(found.value)
    assert "\n" not in sentence and sentence.isprintable() and 10 < len(sentence) < 900
    return found.value.key, sentence


def key_of(path):
    text = ""
    for part in path:
        text += f"[{part}]" if isinstance(part, int) else f".{part}" if text else part
    return text


# Both ways ------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", NAMES)
def test_examples_load_cleanly_and_come_back_the_same(name):
    design = example(name)
    assert design.cells
    assert read_design(write_design(design)) == design
    assert read_design(design_document(design)) == design
    assert json.loads(write_design(design)) == json.loads(example_text(name))


positive = st.floats(1e-20, 1e20)
volts = st.just(0.0) | st.floats(1e-9, 1e6) | st.floats(-1e6, -1e-9)
names = st.text(
    st.characters(exclude_categories=("Cc", "Cf", "Cs", "Zl", "Zp", "Cn"), exclude_characters='\u00a0'), min_size=1, max_size=64
).filter(lambda s: s == s.strip() and s.strip())  # fmt: skip


@given(names, volts, positive, positive, st.just(0.0) | st.floats(1e-9, 0.99), st.booleans())
def test_any_design_comes_back_to_the_last_bit(name, low, span, ohm, tolerance, bare):
    demo = example()
    first, *others = demo.signals
    signal = replace(first, weight=low, low=low, high=low + span, value=-low, source_resistance=ohm)
    cell = demo.cells[0]
    plus = tuple(Leg(name, ohm) if leg.source == first.name else leg for leg in cell.plus)
    design = replace(
        demo,
        title=name,
        signals=(replace(signal, name=name), *others),
        cells=(replace(cell, plus=plus, feedback=ohm),),
        resistor=replace(demo.resistor, tolerance=tolerance),
        op_amp=replace(
            demo.op_amp, second_pole=None if bare else max(ohm, 1e-3), thermal_resistance=None, junction_most=None
        ),
        load=Load() if bare else Load(ohm, tolerance),
        noise_band=(ohm, 2 * ohm),
    )
    try:
        text = write_design(design)
    except InvalidDesign as refused:
        # the only thing drawn above that a design may not have is a name that is taken
        assert refused.key.startswith("signals[") and refused.key.endswith(".name")
    else:
        assert read_design(text) == design


def test_numbers_may_be_typed_in_engineering_notation():
    document = changed(("cells", 0, "feedback"), "28k")
    document["load"]["resistance"] = "10 kΩ"
    document["op_amp"]["slew_rate"] = "12 V/µs"
    document["op_amp"]["cmrr"] = "80 dB"
    document["resistor"]["temperature_coefficient"] = "25 ppm/K"
    document["supply"]["tolerance"] = "5 %"
    document["noise_band"] = ["100m", "100k"]
    document["signals"][0]["value"] = "\u22120.5 V"
    document["op_amp"]["per_package"] = "2"
    design = read_design(document)
    assert (design.cells[0].feedback, design.load.resistance, design.op_amp.slew_rate) == (28e3, 10e3, 12e6)
    assert (design.op_amp.cmrr, design.resistor.temperature_coefficient) == (pytest.approx(1e4), 25e-6)
    assert (design.supply.tolerance, design.noise_band, design.signals[0].value) == (0.05, (0.1, 1e5), -0.5)
    assert design.op_amp.per_package == 2
    written = json.loads(write_design(design))
    assert isinstance(written["cells"][0]["feedback"], int | float)


def test_optional_parts_may_be_left_out():
    document = copy.deepcopy(DOCUMENT)
    for key in ("target", "load", "stray_capacitance", "noise_band", "cells"):
        del document[key]
    design = read_design(document)
    assert (design.target.offset, design.target.low, design.load.resistance) == (0.0, None, None)
    assert (design.stray_capacitance, design.noise_band, design.cells) == (0.0, (0.1, 1e5), ())
    assert read_design(write_design(design)) == design
    document["target"] = {"offset": 1}
    assert read_design(document).target.accuracy is None


@pytest.mark.parametrize(
    "path",
    [("op_amp", "second_pole"), ("op_amp", "thermal_resistance"), ("op_amp", "junction_most"), ("load", "resistance"),
     ("cells", 0, "feedback"), ("cells", 0, "plus_ground"), ("cells", 0, "minus_ground"), ("target", "accuracy")],
)  # fmt: skip
def test_null_means_not_there(path):
    design = read_design(changed(path, None))
    assert read_design(write_design(design)) == design


def test_a_value_outside_its_range_is_allowed():
    assert read_design(changed(("signals", 0, "value"), 99)).signals[0].value == 99.0


def test_a_byte_order_mark_is_dropped():
    text = example_text(NAMES[0])
    assert read_design(b"\xef\xbb\xbf" + text.encode()) == read_design(text)


# Values ---------------------------------------------------------------------------------------------

NUMBERS = [
    *[("signals", 0, k) for k in ("weight", "low", "high", "value", "source_resistance", "frequency")],
    *[("target", k) for k in ("offset", "low", "high", "accuracy", "noise", "bandwidth")],
    *[("reference", k) for k in ("voltage", "source_resistance", "tolerance")],
    *[("supply", k) for k in ("high", "low", "tolerance")],
    *[("load", k) for k in ("resistance", "capacitance")],
    *[("ambient", k) for k in ("nominal", "low", "high")],
    *[("resistor", k) for k in ("tolerance", "temperature_coefficient", "power", "least", "most")],
    *[("op_amp", k) for k in DOCUMENT["op_amp"] if k != "name"],
    *[("cells", 0, k) for k in ("plus_ground", "feedback", "feedback_capacitance")],
    ("cells", 0, "minus", 0, "resistance"), ("cells", 0, "plus", 1, "resistance"), ("noise_band", 0),
    ("noise_band", 1), ("stray_capacitance",),
]  # fmt: skip
NO_NUMBER = [
    True,
    False,
    "",
    "abc",
    "nan",
    "1e400",
    math.nan,
    math.inf,
    -math.inf,
    [],
    {},
    [1],
    10**400,
    1e31,
    "4K7K",
    "3 apples",
]


@pytest.mark.parametrize("path", NUMBERS, ids=key_of)
def test_every_number_must_be_a_finite_number(path):
    for value in NO_NUMBER:
        key, sentence = refusal(changed(path, value))
        assert key == key_of(path), value
        assert key in sentence and "must be" in sentence


NOT_NEGATIVE = [
    ("signals", 0, "source_resistance"), ("signals", 0, "frequency"), ("target", "accuracy"), ("target", "noise"),
    ("target", "bandwidth"), ("reference", "source_resistance"), ("reference", "tolerance"), ("supply", "tolerance"),
    ("load", "resistance"), ("load", "capacitance"), ("resistor", "tolerance"), ("resistor", "temperature_coefficient"),
    ("resistor", "power"), ("resistor", "least"), ("resistor", "most"), ("cells", 0, "plus_ground"),
    ("cells", 0, "feedback"), ("cells", 0, "feedback_capacitance"), ("cells", 0, "minus", 0, "resistance"),
    ("cells", 0, "plus", 1, "resistance"), ("noise_band", 0), ("stray_capacitance",),
    *[("op_amp", k) for k in DOCUMENT["op_amp"] if k not in ("name", "common_mode_high", "common_mode_low", "junction_most")],
]  # fmt: skip


@pytest.mark.parametrize("path", NOT_NEGATIVE, ids=key_of)
def test_a_wrong_sign_is_refused(path):
    key, sentence = refusal(changed(path, -1))
    assert key == key_of(path) and "-1" in sentence


POSITIVE = [
    ("target", "accuracy"), ("load", "resistance"), ("resistor", "power"), ("resistor", "least"), ("cells", 0, "feedback"),
    ("cells", 0, "minus", 0, "resistance"), ("cells", 0, "plus", 1, "resistance"), ("noise_band", 0),
    *[("op_amp", k) for k in ("open_loop_gain", "gain_bandwidth", "second_pole", "slew_rate", "input_resistance", "cmrr",
                              "psrr", "output_current", "supply_most", "thermal_resistance", "per_package")],
]  # fmt: skip


@pytest.mark.parametrize("path", POSITIVE, ids=key_of)
def test_zero_is_refused_where_it_makes_no_sense(path):
    assert refusal(changed(path, 0))[0] == key_of(path)


@pytest.mark.parametrize(
    ("path", "value", "key"),
    [
        (("signals", 0, "high"), -1, "signals[0].high"), (("supply", "high"), -7, "supply.high"),
        (("supply", "high"), -6, "supply.high"), (("supply", "tolerance"), 1, "supply.tolerance"),
        (("ambient", "high"), -40, "ambient.high"), (("ambient", "nominal"), 80, "ambient.nominal"),
        (("ambient", "low"), -300, "ambient.low"), (("resistor", "series"), "E97", "resistor.series"),
        (("resistor", "series"), "E5", "resistor.series"), (("resistor", "series"), 96, "resistor.series"),
        (("resistor", "most"), 10, "resistor.most"), (("noise_band",), [10, 10], "noise_band[1]"),
        (("noise_band",), [100, 10], "noise_band[1]"), (("noise_band",), [10], "noise_band"), (("noise_band",), "10", "noise_band"),
        (("op_amp", "supply_least"), 99, "op_amp.supply_most"), (("op_amp", "per_package"), 1.5, "op_amp.per_package"),
        (("op_amp", "name"), "", "op_amp.name"), (("op_amp", "name"), None, "op_amp.name"), (("target", "high"), -1, "target.high"),
        (("format",), "sumwright-design/2", "format"), (("format",), None, "format"), (("title",), 5, "title"),
        (("title",), "x" * 201, "title"), (("signals",), [], "signals"), (("signals",), {}, "signals"),
        (("signals",), DOCUMENT["signals"] * 20, "signals"), (("signals", 0), 5, "signals[0]"), (("target",), 5, "target"),
        (("supply",), None, "supply"), (("op_amp",), [], "op_amp"), (("cells",), {}, "cells"), (("cells", 0), None, "cells[0]"),
        (("cells", 0, "minus"), None, "cells[0].minus"), (("cells", 0, "plus", 0), 4700, "cells[0].plus[0]"),
    ],
)  # fmt: skip
def test_values_that_contradict_each_other_are_refused(path, value, key):
    assert refusal(changed(path, value))[0] == key


# Keys -----------------------------------------------------------------------------------------------


def places(document, path=()):
    """The path of every object in a document."""
    if isinstance(document, dict):
        yield path
        for key, value in document.items():
            yield from places(value, (*path, key))
    elif isinstance(document, list):
        for k, value in enumerate(document):
            yield from places(value, (*path, k))


@pytest.mark.parametrize("path", list(places(DOCUMENT)), ids=lambda p: key_of(p) or "top")
def test_an_unknown_key_is_named_wherever_it_stands(path):
    key, sentence = refusal(changed((*path, "wieght"), 0.25))
    assert key == key_of((*path, "wieght"))
    assert "wieght" in sentence and "0.25" in sentence and "keys are" in sentence


OPTIONAL = {"target", "reference", "load", "cells", "stray_capacitance", "noise_band"}


def test_every_missing_key_is_named():
    for path in places(DOCUMENT):
        at = DOCUMENT
        for key in path:
            at = at[key]
        for key in at:
            if (not path and key in OPTIONAL) or (path == ("target",) and key != "offset"):
                continue
            assert refusal(changed((*path, key), ...))[0] == key_of((*path, key))


def test_a_key_that_stands_twice_is_refused_even_where_the_values_agree():
    text = example_text(NAMES[0]).replace('"weight": 0.1,', '"weight": 0.1, "weight": 0.1,', 1)
    key, sentence = refusal(text)
    assert key == "signals[0].weight" and "twice" in sentence


# Names ----------------------------------------------------------------------------------------------

BAD_NAMES = [
    "", " ", " ridge", "ridge ", "reference", "Reference", "REFERENCE", "output", "Output", "cell 1", "Cell 7", "cell  2",
    "CELL12", "cell 99", "a\nb", "a\tb", "a\x00b", "a\x1b[31mb", "a\u202eb", "a\u200bb", "\ufeffa", "a\u2028b", "a\ud800b",
    "x" * 65, "x" * 10_000, None, 5, True, [], {},
]  # fmt: skip


@pytest.mark.parametrize("name", BAD_NAMES, ids=lambda n: ascii(n)[:20])
def test_a_name_that_would_mislead_is_refused(name):
    document = changed(("signals", 0, "name"), name)
    assert refusal(document)[0] == "signals[0].name"


@pytest.mark.parametrize(
    "name", ["<script>alert(1)</script>", "a, b", "Zug-Ω 5 µ", "cellar 1", "referenced", "x" * 64, "東 1"]
)
def test_an_odd_name_is_only_a_name(name):
    document = changed(("signals", 0, "name"), name)
    document["cells"][0]["plus"][0]["from"] = name
    assert read_design(document).signals[0].name == name


def test_names_must_differ():
    assert refusal(changed(("signals", 2, "name"), "ridge"))[0] == "signals[2].name"
    document = changed(("signals", 0, "name"), "caf\u00e9")
    document["signals"][1]["name"] = "cafe\u0301"  # the same to the eye
    assert refusal(document)[0] == "signals[1].name"


# The chain ------------------------------------------------------------------------------------------


def leg(source, resistance=1e4):
    return {"from": source, "resistance": resistance}


@pytest.mark.parametrize(
    ("path", "value", "key"),
    [
        (("cells", 0, "plus", 0, "from"), "nobody", "cells[0].plus[0].from"),
        (("cells", 0, "plus", 0, "from"), "Ridge", "cells[0].plus[0].from"),
        (("cells", 0, "plus", 0, "from"), 5, "cells[0].plus[0].from"),
        (("cells", 0, "plus", 0, "from"), [], "cells[0].plus[0].from"),
        (("cells", 0, "plus", 0, "from"), "cell 1", "cells[0].plus[0].from"),
        (("cells", 0, "plus", 0, "from"), "cell 2", "cells[0].plus[0].from"),
        (("cells", 0, "plus", 0, "from"), "output", "cells[0].plus[0].from"),
        (("cells", 0, "plus", 0, "from"), "bed", "cells[0].plus[1].from"),
        (("cells", 0, "minus"), [leg("wind"), leg("reference")], "cells[0].plus[4].from"),
        (("cells", 0, "minus"), [leg("wind"), leg("ridge")], "cells[0].plus[0].from"),
        (("cells", 0, "minus"), [], "signals[4].name"),
        (("cells", 0, "plus_ground"), 0, "cells[0].plus_ground"),
        (("cells", 0, "plus", 0, "resistance"), 0, "cells[0].plus[0].resistance"),
        (("cells", 0, "minus_ground"), 0, "cells[0].minus_ground"),
        (("reference",), ..., "cells[0].plus[4].from"),
        (("reference",), None, "cells[0].plus[4].from"),
    ],
)  # fmt: skip
def test_legs_that_cannot_be_are_refused(path, value, key):
    assert refusal(changed(path, value))[0] == key


def test_a_signal_feeds_one_leg_of_the_whole_stage():
    document = copy.deepcopy(TWO_CELLS)
    document["cells"][1]["minus"].append(leg("paddle 8"))
    key, sentence = refusal(document)
    assert key == "cells[1].minus[1].from" and "cells[0].minus[0]" in sentence


def test_a_cell_takes_earlier_cells_only_and_each_once():
    assert refusal(changed(("cells", 0, "minus", 0, "from"), "cell 2", TWO_CELLS))[0] == "cells[0].minus[0].from"
    assert refusal(changed(("cells", 1, "minus", 0, "from"), "cell 2", TWO_CELLS))[0] == "cells[1].minus[0].from"
    document = copy.deepcopy(TWO_CELLS)
    document["cells"][1]["minus"].append(leg("cell 1"))
    assert refusal(document)[0] == "cells[1].minus[1].from"


def test_the_reference_may_feed_one_leg_in_each_cell():
    document = copy.deepcopy(TWO_CELLS)
    document["reference"] = {"voltage": 2.5, "source_resistance": 0, "tolerance": 0}
    for cell in document["cells"]:
        cell["minus"].append(leg("reference"))
    assert read_design(document).reference == Reference(2.5)
    document["cells"][1]["minus"].append(leg("reference"))
    assert refusal(document)[0] == "cells[1].minus[2].from"


def follower(**cell):
    new = {
        "minus": [], "plus": [leg("ridge", 0)], "minus_ground": None, "plus_ground": None, "feedback": 1000,
        "feedback_capacitance": 0, **cell,
    }  # fmt: skip
    document = copy.deepcopy(DOCUMENT)
    document["signals"] = document["signals"][:1]
    document["cells"] = [new]
    return document


def test_a_wire_may_be_the_one_thing_on_the_plus_node():
    assert read_design(follower()).cells == (Cell(plus=(Leg("ridge", 0.0),), feedback=1000.0),)
    assert refusal(follower(plus_ground=1000))[0] == "cells[0].plus[0].resistance"
    assert refusal(follower(plus=[leg("ridge", 0), leg("reference")]))[0] == "cells[0].plus[0].resistance"
    assert refusal(follower(minus=[leg("ridge", 0)], plus=[], plus_ground=0))[0] == "cells[0].minus[0].resistance"


def test_no_node_may_float():
    assert refusal(follower(minus=[leg("ridge")], plus=[]))[0] == "cells[0].plus_ground"
    assert refusal(follower(feedback=None))[0] == "cells[0].minus"


def test_without_feedback_it_is_a_comparator():
    document = follower(minus=[leg("ridge")], plus=[], plus_ground=0, feedback=None)
    assert read_design(document).cells[0].feedback is None


# The file itself ------------------------------------------------------------------------------------

TEXT = example_text(NAMES[0])


def test_a_text_cut_short_anywhere_is_refused():
    whole = TEXT.rstrip()
    for end in range(0, len(whole), 7):
        _, sentence = refusal(whole[:end])
        assert "cut short" in sentence or "empty" in sentence or "cannot be read" in sentence


@pytest.mark.parametrize(
    ("text", "says"),
    [
        ("", "empty"), ("  \n ", "empty"), ("null", "must be an object"), ("[]", "must be an object"), ("5", "must be an object"),
        ('"x"', "must be an object"), ("{}", "format is missing"), ("hello", "cannot be read"), ("{'a': 1}", "cannot be read"),
        (TEXT + TEXT, "cannot be read"), ("[" * 100_000, "nested"), ('{"a":' * 100_000, "nested"), (TEXT.encode("utf-16"), "UTF-16"),
        (b"\xff" + TEXT.encode(), "not UTF-8"), (TEXT.replace("ridge", "caf\u00e9").encode("latin-1"), "not UTF-8"),
        (b"\x00" * 100, "cannot be read"), (b" " * (4 * 2**20 + 1), "larger than 4 MB"), ("\ud800", "UTF-8"),
        (TEXT.replace('"weight": 0.1,', '"weight": NaN,'), "signals[0].weight"),
        (TEXT.replace('"weight": 0.1,', '"weight": 1e400,'), "signals[0].weight"),
        (TEXT.replace('"weight": 0.1,', '"weight": -Infinity,'), "signals[0].weight"),
        (TEXT.replace('"weight": 0.1,', '"weight": ' + "9" * 100_000 + ","), "signals[0].weight"),
    ],
    ids=lambda x: ascii(x)[:24],
)  # fmt: skip
def test_what_is_no_design_file_is_refused(text, says):
    assert says in refusal(text)[1]


def test_a_path_that_cannot_be_read_is_refused(tmp_path):
    assert "does not exist" in refusal(tmp_path / "none.json")[1]
    assert "is a folder" in refusal(tmp_path)[1]
    assert "cannot be read" in refusal(tmp_path / ("x" * 5000))[1]
    assert "cannot be read" in refusal(type(tmp_path)("a\0b"))[1]


def test_a_text_is_never_taken_for_a_file_name(tmp_path):
    path = tmp_path / "design.json"
    write_design(example(), path)
    assert read_design(path) == example()
    assert "cannot be read" in refusal(str(path))[1]


json_values = st.recursive(
    st.none() | st.booleans() | st.integers() | st.floats() | st.text(max_size=20),
    lambda inner: st.lists(inner, max_size=4) | st.dictionaries(st.text(max_size=8), inner, max_size=4),
    max_leaves=12,
)
all_places = [(*path, key) for path in places(DOCUMENT) for key in reduce(lambda at, k: at[k], path, DOCUMENT)]  # fmt: skip


@given(json_values)
@settings(max_examples=200)
def test_any_json_is_a_design_or_a_refusal(value):
    try:
        read_design(json.dumps(value))
    except InvalidDesign as refused:
        assert "\n" not in str(refused)


@given(st.sampled_from(all_places), json_values)
@settings(max_examples=500)
def test_any_value_anywhere_gives_a_design_that_comes_back_or_a_refusal(path, value):
    try:
        design = read_design(json.dumps(changed(path, value)))
    except InvalidDesign as refused:
        assert "\n" not in str(refused)
    else:
        assert read_design(write_design(design)) == design


@given(st.binary(max_size=200))
def test_any_bytes_are_a_design_or_a_refusal(data):
    with pytest.raises(InvalidDesign):
        read_design(data)


# Writing --------------------------------------------------------------------------------------------


def test_a_design_that_could_not_be_read_again_is_not_written(tmp_path):
    path = tmp_path / "design.json"
    write_design(example(), path)
    before = path.read_bytes()
    broken = replace(example(), supply=replace(example().supply, high=math.nan))
    with pytest.raises(InvalidDesign, match=r"supply\.high"):
        write_design(broken, path)
    assert path.read_bytes() == before
    assert [p.name for p in tmp_path.iterdir()] == ["design.json"]


def test_a_crash_while_writing_keeps_the_old_file(tmp_path, monkeypatch):
    path = tmp_path / "design.json"
    write_design(example(), path)
    before = path.read_bytes()

    def full(handle):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(os, "fsync", full)
    with pytest.raises(SumwrightError, match="No space left"):
        write_design(example("tide-gauge"), path)
    assert path.read_bytes() == before
    assert [p.name for p in tmp_path.iterdir()] == ["design.json"]


def test_writing_keeps_permissions_and_links(tmp_path):
    path, link = tmp_path / "design.json", tmp_path / "link.json"
    write_design(example(), path)
    path.chmod(0o640)
    link.symlink_to(path)
    write_design(example("tide-gauge"), link)
    assert link.is_symlink() and read_design(path) == example("tide-gauge")
    assert stat.S_IMODE(path.stat().st_mode) == 0o640


@pytest.mark.skipif(not hasattr(os, "mkfifo"), reason="no pipes with names here")
def test_what_is_no_file_is_written_to_and_not_replaced(tmp_path):
    pipe = tmp_path / "pipe"
    os.mkfifo(pipe)
    with ThreadPoolExecutor(1) as pool:
        read = pool.submit(pipe.read_bytes)
        write_design(example("tide-gauge"), pipe)
        assert read_design(read.result(timeout=20)) == example("tide-gauge")
    assert pipe.is_fifo() and list(tmp_path.iterdir()) == [pipe]


def test_writing_where_nothing_can_be_written_says_so(tmp_path):
    with pytest.raises(SumwrightError, match="cannot be written"):
        write_design(example(), tmp_path / "none" / "design.json")
    with pytest.raises(SumwrightError, match="cannot be written"):
        write_design(example(), tmp_path)
