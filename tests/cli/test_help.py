"""Help: at once, and without any heavy library."""

import json
import os
import subprocess
import sys
from pathlib import Path

import terrasol
from terrasol.cli.endings import EXIT_CODES
from terrasol.cli.irradiation import irradiation
from terrasol.cli.main import main
from terrasol.constants import ENERGY_UNITS

ENVIRONMENT = os.environ | {"PYTHONPATH": str(Path(terrasol.__file__).parents[1])}
HEAVY = ("numba", "numpy", "scipy", "pandas", "rasterio", "pyproj", "pvlib", "matplotlib", "xarray")
PROBE = f"""
import json, sys
from terrasol.cli.main import main
found = []
for arguments in json.loads(sys.argv[1]):
    code = main(arguments)
    found.append([code, [name for name in {HEAVY!r} if name in sys.modules]])
print(json.dumps(found))
"""


COMMANDS = ("compare", "hours", "irradiation", "parcels", "plots", "series", "site", "terrain")


def test_nothing_heavy_is_loaded():
    """All calls in one process: what none of them loads, each of them does not."""
    asked = [[], ["--help"], ["--version"], ["terrain"], *([name, "--help"] for name in COMMANDS)]
    run = subprocess.run(
        [sys.executable, "-c", PROBE, json.dumps(asked)],
        env=ENVIRONMENT, capture_output=True, text=True, check=True,
    )  # fmt: skip
    found = json.loads(run.stdout.splitlines()[-1])
    for arguments, (code, loaded) in zip(asked, found, strict=True):
        assert loaded == [], arguments
        assert code == (0 if arguments and arguments[-1].startswith("--") else 2), arguments


def test_help_documents_exit_codes(capsys):
    assert main(["--help"]) == 0
    text = " ".join(capsys.readouterr().out.split())
    for code, words in EXIT_CODES.items():
        assert f"{code} {words}" in text
    assert set(EXIT_CODES) >= {0, 2, 3, 4, 5, 130}


def test_version(capsys):
    assert main(["--version"]) == 0
    assert capsys.readouterr().out == f"terrasol {terrasol.__version__}\n"


def test_choices_are_those_of_the_library():
    """The command line spells them out, for it must not load the library to tell them."""
    from terrasol.files.sink import COMPRESSIONS
    from terrasol.files.vertical import OPTION_NAMES
    from terrasol.light import settings as light
    from terrasol.sky.diffuse import MODELS

    choices = {p.name: tuple(getattr(p.type, "choices", ())) for p in irradiation.params}
    assert set(ENERGY_UNITS.values()) == set(light.UNITS)
    assert choices["basis"] == light.BASES
    assert choices["diffuse"] == MODELS
    assert choices["compression"] == tuple(COMPRESSIONS)
    assert choices["vertical_unit"] == OPTION_NAMES
