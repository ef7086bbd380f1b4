"""Runs that end early, or by a defect."""

import os
import signal
import sys
import time

import pytest
from files.made import write_raster

from terrasol.cli.main import main
from terrasol.cli.requests import PATIENCE, endable
from terrasol.errors import UnfinishedError


@pytest.fixture
def broken_engine(tmp_path, monkeypatch, capfd):
    """Run `terrain` with an engine that does as told; return exit code and stderr.

    What comes first is done on the main thread, which alone hears requests.
    """
    dem = write_raster(tmp_path / "dem.tif", unit="m")

    def run(sweep, first=lambda: None):
        monkeypatch.setattr("terrasol.cli.run.announce_compilation", lambda quiet: first())
        monkeypatch.setattr("terrasol.engine.ground_work.sweep", sweep)
        code = main(["terrain", str(dem), str(tmp_path / "a" / "out"), "--azimuths", "8"])
        assert [path.name for path in tmp_path.iterdir()] == ["dem.tif"]
        return code, capfd.readouterr().err

    return run


def raising(error):
    def sweep(*_):
        raise error

    return sweep


@pytest.mark.parametrize(
    ("error", "code", "words"),
    [
        (KeyboardInterrupt(), 130, "interrupted"),
        (UnfinishedError("2 of 9 blocks were lost: run again"), 5, "2 of 9 blocks"),
        (MemoryError(), 5, "not enough memory"),
        (ZeroDivisionError("division by zero"), 70, "please report it (ZeroDivisionError"),
    ],
)
def test_early_end(broken_engine, error, code, words):
    found, err = broken_engine(raising(error))
    assert found == code
    assert err.strip().startswith("terrasol: ")
    assert words in err
    assert "\n" not in err.strip()


@pytest.mark.parametrize("name", ["SIGINT", "SIGTERM", "SIGHUP"])
def test_request_to_end(broken_engine, name):
    """Even if it comes twice, as from an impatient hand."""
    request = getattr(signal, name)
    times = [request, request]

    def sweep(*_):
        time.sleep(0.1)
        if times:
            os.kill(os.getpid(), times.pop())
            time.sleep(0.1)

    before = signal.getsignal(request)
    code, err = broken_engine(sweep)
    assert code == 130
    assert err.strip() == "terrasol: interrupted, nothing was written"
    assert signal.getsignal(request) is before


class Forgetful:
    """Asks to end while Python disposes of it, and so drops what is raised."""

    def __init__(self, request):
        self.request = request

    def __del__(self):
        signal.raise_signal(self.request)  # heard before it returns, unlike os.kill


@pytest.mark.parametrize("name", ["SIGINT", "SIGTERM", "SIGHUP"])
def test_request_that_python_drops(broken_engine, name):
    """It is made up for within seconds, and Python prints nothing of what it dropped."""
    came_back = []

    def first():
        one = Forgetful(getattr(signal, name))
        del one
        came_back.append(True)
        end = time.monotonic() + 10.0
        while time.monotonic() < end:
            time.sleep(0.01)

    code, err = broken_engine(raising(AssertionError("not reached")), first)
    assert came_back == [True]
    assert code == 130
    assert err.strip() == "terrasol: interrupted, nothing was written"


def test_request_that_a_library_drops(broken_engine):
    dropped = []

    def first():
        try:
            signal.raise_signal(signal.SIGTERM)
        except KeyboardInterrupt:
            dropped.append(True)
        time.sleep(10.0)

    began = time.monotonic()
    assert broken_engine(raising(AssertionError("not reached")), first)[0] == 130
    assert dropped == [True]
    assert time.monotonic() - began < 9.0


def test_requests_leave_cleaning_in_peace():
    """Long cleaning, during which requests come again and again, is not cut short."""
    cleaned = []

    def work():
        try:
            os.kill(os.getpid(), signal.SIGTERM)
            time.sleep(5.0)
        finally:
            for _ in range(10):
                os.kill(os.getpid(), signal.SIGINT)
                time.sleep(PATIENCE / 4.0)
            cleaned.append(True)

    with pytest.raises(KeyboardInterrupt), endable():
        work()
    assert cleaned == [True]


def test_other_errors_that_python_drops_are_told(monkeypatch):
    class Broken:
        def __del__(self):
            raise ZeroDivisionError

    told = []
    monkeypatch.setattr(sys, "unraisablehook", lambda what: told.append(what.exc_type))
    with endable():
        Broken()
    assert told == [ZeroDivisionError]


def test_traceback_on_demand(broken_engine, monkeypatch):
    monkeypatch.setenv("TERRASOL_DEBUG", "1")
    code, err = broken_engine(raising(ZeroDivisionError("division by zero")))
    assert code == 70
    assert "Traceback" in err
