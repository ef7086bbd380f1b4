"""Standard streams that are full, closed, or that nobody reads; and early interrupts."""

import os
import shlex
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest
from files.made import write_raster

import terrasol

ENVIRONMENT = os.environ | {"PYTHONPATH": str(Path(terrasol.__file__).parents[1])}
PROGRAM = f"{shlex.quote(sys.executable)} -m terrasol.cli.main"
REFUSED = "terrasol: standard output could not be written ({}): send it elsewhere\n"
FULL = REFUSED.format("No space left on device")


@pytest.fixture
def shell(tmp_path):
    """Run a line of shell in which TERRASOL is the program; return exit code and stderr."""
    write_raster(tmp_path / "dem.tif", unit="m")

    def run(line):
        line = line.replace("TERRASOL", PROGRAM)
        done = subprocess.run(
            ["bash", "-c", line],
            cwd=tmp_path, env=ENVIRONMENT, stderr=subprocess.PIPE, text=True,
            stdout=subprocess.DEVNULL,
        )  # fmt: skip
        return done.returncode, done.stderr

    return run


@pytest.mark.skipif(not os.path.exists("/dev/full"), reason="needs /dev/full")
@pytest.mark.parametrize(
    "words", ["--help", "irradiation --help", "terrain dem.tif out --azimuths 8 --dry-run --json"]
)
def test_full_stdout(shell, words):
    assert shell(f"TERRASOL {words} > /dev/full") == (4, FULL)


@pytest.mark.heavy
@pytest.mark.skipif(not os.path.exists("/dev/full"), reason="needs /dev/full")
def test_full_stdout_after_a_run(shell, tmp_path):
    assert shell("TERRASOL terrain dem.tif out --azimuths 8 --quiet --json > /dev/full") == (
        4,
        FULL,
    )
    assert (tmp_path / "out" / "run.json").exists()


@pytest.mark.heavy
def test_closed_streams(shell, tmp_path):
    assert shell("TERRASOL --version >&-") == (4, REFUSED.format("Bad file descriptor"))
    assert shell("TERRASOL terrain gone.tif out 2>&-") == (3, "")
    assert shell("TERRASOL terrain dem.tif out --azimuths 8 <&- >&- 2>&-") == (0, "")
    assert (tmp_path / "out" / "slope.tif").exists()


@pytest.mark.parametrize("words", ["irradiation --help", "terrain dem.tif out --dry-run"])
def test_reader_that_has_gone(shell, words):
    assert shell(f"TERRASOL {words} | true; exit ${{PIPESTATUS[0]}}") == (0, "")


@pytest.mark.heavy
def test_listener_that_has_gone(shell):
    line = "TERRASOL terrain dem.tif out --azimuths 8 2>&1 >/dev/null | true; exit ${PIPESTATUS[0]}"
    assert shell(line) == (0, "")


@pytest.mark.skipif(not hasattr(signal, "SIGHUP"), reason="needs SIGHUP")
def test_hang_up_that_the_caller_ignores_is_ignored(shell):
    """As nohup does."""
    assert shell("trap '' HUP; TERRASOL --help & sleep 0.05; kill -HUP $!; wait $!") == (0, "")


@pytest.mark.parametrize("wait", [0.1, 0.4])
def test_interrupt_while_libraries_are_imported(tmp_path, wait):
    dem = write_raster(tmp_path / "dem.tif", unit="m")
    probe = "import sys; from terrasol.cli.main import main; print(flush=True); sys.exit(main())"
    run = subprocess.Popen(
        [sys.executable, "-c", probe, "irradiation", str(dem), str(tmp_path / "out")],
        env=ENVIRONMENT, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True,
    )  # fmt: skip
    assert run.stdout.readline() == "\n"
    time.sleep(wait)
    run.send_signal(signal.SIGINT)
    _, err = run.communicate()
    assert (run.returncode, err.strip()) == (130, "terrasol: interrupted, nothing was written")
    assert os.listdir(tmp_path) == ["dem.tif"]
