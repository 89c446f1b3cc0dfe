"""The README says what is true: its commands, verbs, settings and links are there."""

import re
import subprocess
from dataclasses import fields
from pathlib import Path

import pytest
from sumwright.command import VERBS
from sumwright.notebook.settings import Settings

ROOT = Path(__file__).parent.parent
README = (ROOT / "README.md").read_text(encoding="utf-8")


def test_every_verb_is_listed_and_no_other():
    listed = set(re.findall(r"`sumwright ([a-z]+)", README))
    assert listed == {verb.name for verb in VERBS}


def test_every_setting_is_listed_and_no_other():
    listed = set(re.findall(r"SUMWRIGHT_([A-Z_]+)", README)) - {"SETTINGS"}
    assert listed == {field.name.upper() for field in fields(Settings)}


@pytest.mark.parametrize("name", ["README.md", "DEVELOPERS.md", "app/sumwright/examples/README.md"])
def test_every_link_leads_somewhere(name):
    page = ROOT / name
    links = re.findall(r"\]\(([^)#]+)", page.read_text(encoding="utf-8"))
    for link in links:
        assert link.startswith("http") or (page.parent / link).exists(), link


def test_ci_runs_the_test_command_that_the_readme_names():
    assert "\n    tests/run\n" in README
    assert re.search(r"^exec tests/run\b", (ROOT / ".ci/run").read_text(), re.MULTILINE)
    for script in ("tests/run", ".ci/run"):
        assert (ROOT / script).stat().st_mode & 0o111, f"{script} must be executable"
        subprocess.run(["bash", "-n", ROOT / script], check=True)


def test_the_set_up_command_serves_the_folder_that_is_there():
    assert "pip install -q . && .venv/bin/panel serve app --show" in README
    assert (ROOT / "app/main.py").is_file() and (ROOT / "pyproject.toml").is_file()


def test_nothing_else_is_visible_at_the_top():
    made = {"build", "dist"}  # by packaging; git does not keep them
    visible = {path.name for path in ROOT.iterdir() if not path.name.startswith(".")} - made
    assert visible == {"README.md", "DEVELOPERS.md", "pyproject.toml", "app", "tests", "assets", "Dockerfile"}
