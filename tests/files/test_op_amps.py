"""The person's own list of op amps, and the list that comes with the project."""

from pathlib import Path

import pytest
from sumwright.engine.catalogue import FIGURES, UNITS, catalogue, find
from sumwright.errors import InvalidDesign
from sumwright.files.op_amps import COLUMNS, read_op_amps, write_op_amps


def test_a_list_written_is_the_list_read():
    again = read_op_amps(write_op_amps(catalogue()))
    assert [e.op_amp for e in again] == [e.op_amp for e in catalogue()]
    assert {e.kind for e in again} == {"own"}


def test_every_figure_of_the_catalogue_says_where_it_comes_from():
    assert len(catalogue()) >= 20 and set(UNITS) == set(FIGURES)
    for entry in catalogue():
        assert set(entry.sources) == set(FIGURES)
        assert all(entry.sources.values())
        if entry.kind == "class":
            assert set(entry.sources.values()) == {"representative of its class, invented for this catalogue"}


def test_known_types_hold_their_published_figures():
    # TI SLOS068V: LM358 offset 7 mV and bias 250 nA at most; Motorola TL072: 13 V/µs, 18 nV/√Hz; Microchip DS21733J
    # MCP6002: 1 MHz, 1.8 V to 6 V; OP27E: 25 µV at most, 3 nV/√Hz, corner 2.7 Hz
    assert find("LM358").op_amp.offset_voltage == 7e-3 and find("lm358").op_amp.bias_current == 250e-9
    assert find("TL072").op_amp.slew_rate == 13e6 and find("TL072").op_amp.noise_voltage == 18e-9
    assert (find("MCP6002").op_amp.supply_least, find("MCP6002").op_amp.supply_most) == (1.8, 6.0)
    assert find("OP27E").op_amp.offset_voltage == 25e-6 and find("OP27E").op_amp.noise_voltage_corner == 2.7
    # its published swings: ±13.5 V into 10 kΩ and ±12 V into 2 kΩ from ±15 V
    amp = find("TL072").op_amp
    for volts, load in ((13.5, 1e4), (12.0, 2e3)):
        assert 15 - amp.dropout_high - amp.dropout_resistance * volts / load == pytest.approx(volts, abs=0.02)


def line(**changes):
    amp = catalogue()[0].op_amp
    changes.setdefault("name", "plain")
    return ",".join(str(changes.get(c, getattr(amp, c))) for c in COLUMNS)


HEADER = ",".join(COLUMNS)


def test_engineering_notation_is_read():
    (entry,) = read_op_amps(
        f"{HEADER}\n{line(name='mine', gain_bandwidth='4M7', bias_current='20n', second_pole='')}\n"
    )
    assert entry.op_amp.gain_bandwidth == pytest.approx(4.7e6) and entry.op_amp.bias_current == pytest.approx(20e-9)
    assert entry.op_amp.second_pole is None


@pytest.mark.parametrize(
    ("text", "says"),
    [
        ("", "empty"),
        ("name,open_loop_gain\nx,1\n", "gain_bandwidth is missing"),
        (HEADER.replace("cmrr", "cmr") + "\n", "'cmr' is not a figure"),
        (HEADER + ",cmrr\n", "twice"),
        (f"{HEADER}\n{line()},7\n", "line 2 has"),
        (f"{HEADER}\n{line(gain_bandwidth='fast')}\n", "line 2.*gain_bandwidth.*fast"),
        (f"{HEADER}\n{line(gain_bandwidth='-1M')}\n", "line 2.*gain_bandwidth"),
        (f"{HEADER}\n{line()}\n{line()}\n", "line 3.*already"),
        (f"{HEADER}\r{line()}\r{line()}\r", "line 3.*already"),  # the line ends of old spreadsheets
        (f"{HEADER}\n{'x' * 200_000},1\n", "cannot be read as CSV"),
    ],
)
def test_a_bad_list_is_refused_by_line_and_column(text, says):
    with pytest.raises(InvalidDesign, match=f"(?s).*{says}"):
        read_op_amps(text)


def test_the_example_list_can_be_read():
    text = (Path(__file__).parents[2] / "assets" / "own-op-amps.csv").read_text(encoding="utf-8")
    assert [e.kind for e in read_op_amps(text)] == ["own"] * 3
