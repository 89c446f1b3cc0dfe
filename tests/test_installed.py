"""What `pip install` brings is whole: the page serves from the wheel alone, without a checkout."""

import os
import shutil
import subprocess
import sys
import zipfile
from pathlib import Path

from tests.notebook.served import Server

ROOT = Path(__file__).parent.parent


def test_the_wheel_serves_the_sheet_without_a_checkout(tmp_path):
    source = tmp_path / "source"  # a copy: building leaves files beside the sources
    shutil.copytree(
        ROOT / "app", source / "app", symlinks=True, ignore=shutil.ignore_patterns("__pycache__", "*.egg-info")
    )
    for name in ("pyproject.toml", "README.md"):
        shutil.copy(ROOT / name, source)
    build = [sys.executable, "-m", "pip", "wheel", "-q", "--no-deps", "--no-build-isolation", "-w", tmp_path, source]
    subprocess.run(build, cwd=tmp_path, check=True)
    installed = tmp_path / "installed"
    with zipfile.ZipFile(next(tmp_path.glob("*.whl"))) as wheel:
        wheel.extractall(installed)
    page = installed / "sumwright/app"
    served = {path.relative_to(ROOT / "app/static") for path in (ROOT / "app/static").rglob("*.*")}
    assert served == {path.relative_to(page / "static") for path in (page / "static").rglob("*.*")}

    alone = {"PYTHONPATH": str(installed), "PYTHONSAFEPATH": "1"}
    told = subprocess.run(
        [sys.executable, "-m", "sumwright.command", "serve", "--folder"],
        cwd=tmp_path, env=os.environ | alone, capture_output=True, text=True, check=True,
    )  # fmt: skip
    assert told.stdout.strip() == str(page), "which `panel serve` takes"
    server = Server(tmp_path / "data", more=alone)
    try:
        status, _, body = server.get("/app")
        assert (status, b"Grain hopper" in body) == (200, True)
        for path in served:
            assert server.get(f"/app/static/{path.as_posix()}")[2] == (ROOT / "app/static" / path).read_bytes()
    finally:
        server.stop()
