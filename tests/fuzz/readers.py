"""Every reader under a coverage-guided fuzzer: whatever comes is read, or refused by one sentence. Run by hand.

    pip install atheris
    python tests/fuzz/readers.py op-amps -max_total_time=120

The first word is a reader, the rest are libFuzzer's own options. It ends at the first input that makes a reader fall
and leaves that input in a file `crash-...`; such an input belongs into the reader's test.
"""

from __future__ import annotations

import contextlib
import io
import math
import sys
import tempfile
import zipfile
from pathlib import Path

import atheris

with atheris.instrument_imports(include=["sumwright.files", "sumwright.quantity", "sumwright.notebook", "json", "csv"]):
    from sumwright.errors import SumwrightError
    from sumwright.files.capture import read_capture
    from sumwright.files.design import read_design, write_design
    from sumwright.files.drawer import read_drawer
    from sumwright.files.examples import NAMES, example, example_text
    from sumwright.files.op_amps import read_op_amps
    from sumwright.files.readings import read_readings
    from sumwright.files.waves import read_wave
    from sumwright.notebook import bundle
    from sumwright.notebook.markdown import note_html
    from sumwright.notebook.store import Store
    from sumwright.quantity import format_quantity, parse_quantity, parse_resistor_code

GUIDE = Path(__file__).parents[2] / "assets"
UNITS = ("", "Ω", "V", "A", "F", "Hz", "V/V", "V/s", "K/W", "°C", "s", "%")
NAMED = ("notebook.json", "sheets/1.json", "log/0001.json", "log/0002.json", "log.csv", "tables/0001.csv")


def text_of(data: bytes) -> str:
    return data.decode("utf-8", "replace")


def design(data: bytes) -> None:
    """What is read comes back from what is written."""
    read = read_design(data)
    assert read_design(write_design(read)) == read


def quantity(data: bytes) -> None:
    """What is read is finite, and its text says the same number."""
    source = atheris.FuzzedDataProvider(data)
    unit, typed = source.PickValueInList(list(UNITS)), source.ConsumeUnicodeNoSurrogates(60)
    with contextlib.suppress(SumwrightError):
        parse_resistor_code(typed)
    value = parse_quantity(typed, unit)
    assert math.isfinite(value)
    if unit not in ("V/V", "%") and 1e-30 < abs(value) < 1e30:
        again = parse_quantity(format_quantity(value, unit, 6), unit)
        assert abs(again - value) <= 6e-6 * abs(value), (typed, unit, value, again)


def notebook(data: bytes) -> None:
    """A whole file, or a true one with spoilt members and a manifest that fits them."""
    source = atheris.FuzzedDataProvider(data)
    if source.ConsumeBool():
        bundle.unpack(source.ConsumeBytes(100_000))
        return
    files = dict(_members())
    for _ in range(source.ConsumeIntInRange(1, 4)):
        name = source.PickValueInList(list(NAMED))
        files[name] = source.ConsumeBytes(source.ConsumeIntInRange(0, 600))
    bundle.unpack(bundle._zip({"format": bundle.FORMAT}, files))


_made: dict[str, bytes] = {}


def _members() -> dict[str, bytes]:
    """The files of a small notebook, made once."""
    if not _made:
        with tempfile.TemporaryDirectory() as folder:
            store = Store(Path(folder) / "notebook.db")
            key = store.new_notebook("Vat", "Ines", {}).id
            store.append(key, "note", {"text": "as found"}, "Ines")
            store.append(key, "correction", {"text": "as left", "of": 1}, "Ines")
            with zipfile.ZipFile(io.BytesIO(bundle.export_notebook(store, key))) as packed:
                _made.update({n: packed.read(n) for n in packed.namelist() if n != "manifest.json"})
            store.close()
    return _made


_stage = example()
# Reader: what it does with bytes, and a few good inputs to begin with.
READERS = {
    "design": (design, [example_text(name) for name in NAMES]),
    "quantity": (quantity, ["\0" + t for t in ("4k7", "4.7 kΩ", "-12 V", "86 dB", "13 V/µs", "0R47", "1e-3", "4k7F")]),
    "readings": (lambda d: read_readings(d, _stage), [f"{','.join(_stage.signal_names)},output\n0,0,0,1\n"]),
    "capture": (read_capture, ["time,a,b\ns,V,V\n0,1,2\n1e-6,1.1,2.2\n2e-6,1,2\n", "0;1,5\n1;2,5\n2;3,5\n"]),
    "drawer": (read_drawer, ["resistance,tolerance\n4k7,1%\n10k,1%\n", "4k7\n10k\n"]),
    "op-amps": (lambda d: read_op_amps(text_of(d)), [(GUIDE / "own-op-amps.csv").read_text(encoding="utf-8")]),
    "wave": (lambda d: read_wave(text_of(d)), ["0,1\n1e-3,2\n2e-3,0\n"]),
    "note": (lambda d: note_html(text_of(d)), ["# a *b* [c](http://x.example) `d`\n- e\n\n| a |\n|---|\n| 1 |\n"]),
    "notebook": (notebook, ["\0\0\0"]),
}


def main() -> None:
    if len(sys.argv) < 2 or sys.argv[1] not in READERS:
        sys.exit(f"{__doc__}\nReaders: {', '.join(READERS)}")
    reader, seeds = READERS[sys.argv[1]]

    def one(data: bytes) -> None:
        try:
            reader(data)
        except SumwrightError as refused:
            assert 0 < len(str(refused)) < 2500 and "\n" not in str(refused)

    with tempfile.TemporaryDirectory() as corpus:
        for k, seed in enumerate(seeds):
            Path(corpus, str(k)).write_bytes(seed.encode("utf-8"))
        atheris.Setup([sys.argv[0], corpus, "-max_len=4000", "-timeout=20", *sys.argv[2:]], one)
        atheris.Fuzz()


if __name__ == "__main__":
    main()
