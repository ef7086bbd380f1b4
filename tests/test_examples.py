"""The examples of the documents: they find their files, and run as they stand."""

import re
import shlex
import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[1]
PAGES = ("README.md", "docs/parcels.md", "docs/uncertainty.md")
OWN = "with rasters of your own"
"""After this remark, a block speaks of files that the sample lacks."""


def blocks(kind):
    """All examples of a kind, each with its page."""
    found = []
    for page in PAGES:
        text = (ROOT / page).read_text(encoding="utf-8")
        found += [(page, code) for code in re.findall(rf"```{kind}\n(.*?)```", text, re.DOTALL)]
    return found


def commands():
    """All command lines of terrasol, as lists of words."""
    found = []
    for _, code in blocks("bash"):
        for line in code.replace("\\\n", " ").split(OWN)[0].splitlines():
            words = shlex.split(line, comments=True)
            if words[:1] == ["terrasol"]:
                found.append(words[1:])
    return found


def test_commands_read_files_of_the_sample():
    lines = commands()
    assert len(lines) > 15
    for words in lines:
        files = [word for word in words if re.search(r"\.(tif|csv|geojson|gpkg)$", word)]
        assert files, words
        for file in files:
            assert (ROOT / file).is_file(), words


def test_remarks_of_a_list_of_commands_stand_in_one_column():
    lists = [code for page, code in blocks("bash") if page == "README.md"]
    places = [re.findall(r"^[^#\n]+(?=# )", code, re.MULTILINE) for code in lists]
    assert max(map(len, places)) > 10
    for before, code in zip(places, lists, strict=True):
        assert len(set(map(len, before))) <= 1, code
        assert max(map(len, code.splitlines())) <= 120


@pytest.mark.parametrize(("page", "code"), blocks("python"))
def test_python_reads_files_of_the_sample_and_imports_what_it_names(page, code):
    compile(code, page, "exec")
    assert "import terrasol" in code
    assert ("np." in code) == ("import numpy as np" in code)
    assert "print(" in code
    files = re.findall(r'"([^"]+\.(?:tif|csv|geojson|gpkg))"', code)
    assert files
    for file in files:
        assert (ROOT / file).is_file()


@pytest.mark.heavy
@pytest.mark.parametrize(("page", "code"), blocks("python"))
def test_python_runs_as_written(page, code):
    done = subprocess.run(
        [sys.executable, "-c", code], cwd=ROOT, capture_output=True, text=True, check=False
    )
    assert done.returncode == 0, (page, done.stderr)
    assert done.stdout.strip()


@pytest.mark.heavy
@pytest.mark.parametrize("words", commands(), ids=" ".join)
def test_commands_are_taken_as_written(words):
    """A dry run: inputs are read, options checked, nothing is computed."""
    call = [sys.executable, "-m", "terrasol.cli.main", *words]
    help_text = subprocess.run(
        [*call[:4], "--help"], capture_output=True, text=True, check=False
    ).stdout
    if "--dry-run" not in help_text:
        pytest.skip("this command has no dry run")
    done = subprocess.run(
        [*call, "--dry-run"], cwd=ROOT, capture_output=True, text=True, check=False
    )
    assert done.returncode == 0, done.stderr
