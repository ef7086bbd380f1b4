"""The names a Python user imports, and what importing them costs."""

import inspect
import re
import subprocess
import sys
from pathlib import Path

import pytest

import terrasol
from terrasol import errors

HEAVY = ("numba", "rasterio", "matplotlib", "pvlib", "pandas", "xarray", "scipy", "pyproj", "numpy")


def test_every_public_name_can_be_imported():
    assert len(set(terrasol.__all__)) == len(terrasol.__all__) > 10
    for name in terrasol.__all__:
        thing = getattr(terrasol, name)
        assert thing.__name__ == name
        assert thing.__module__.startswith("terrasol.")
        assert thing.__doc__


def test_homes_and_names_agree():
    assert set(terrasol._HOMES) == set(terrasol.__all__)
    assert dir(terrasol) == sorted(terrasol.__all__)
    for name, home in terrasol._HOMES.items():
        assert getattr(terrasol, name).__module__ == home
    assert terrasol.__version__[0].isdigit()


def test_docstrings_say_what_goes_in_comes_out_and_goes_wrong():
    for name in terrasol.__all__:
        thing = getattr(terrasol, name)
        if isinstance(thing, type):
            assert issubclass(thing, Exception) or "---" in thing.__doc__, name
        else:
            for title in ("Parameters", "Returns", *(["Raises"] if name != "clear_sky" else [])):
                assert f"{title}\n" in inspect.cleandoc(thing.__doc__), (name, title)


def test_star_import_gives_the_public_names():
    names = {}
    exec("from terrasol import *", names)
    assert set(terrasol.__all__) <= set(names)
    assert names["irradiation"] is terrasol.irradiation


def test_unknown_name_is_an_attribute_error():
    with pytest.raises(AttributeError, match=r"terrasol.*no attribute 'sunshine'"):
        _ = terrasol.sunshine
    assert not hasattr(terrasol, "Sunshine")


def loaded_after(statement):
    """Modules in memory after a statement in a fresh Python."""
    code = f"import sys; {statement}; print(' '.join(sys.modules))"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    return set(done.stdout.split())


def test_importing_the_package_costs_nothing():
    loaded = loaded_after("import terrasol; dir(terrasol); terrasol.__version__")
    assert "terrasol" in loaded
    assert loaded.isdisjoint(HEAVY)


def test_setting_a_period_needs_no_kernel_no_raster_library_and_no_plot():
    loaded = loaded_after("from terrasol import parse_period, sun_path; parse_period('2025')")
    assert "terrasol.sky.sun" in loaded
    assert loaded.isdisjoint({"rasterio", "matplotlib", "terrasol.kernels.beam"})


def test_a_percent_sign_stands_after_a_space():
    root = Path(terrasol.__file__).parents[1]
    files = [*root.glob("terrasol/**/*.py"), *root.glob("docs/*.md"), *root.glob("*.md")]
    assert len(files) > 100
    for path in files:
        found = re.search(r"\d%(?!\w)|\.\d%\}|\}%(?!\w)", path.read_text("utf-8"))
        assert found is None, f"{path}: {found.group() if found else ''}"


def test_errors_are_errors_alone():
    own = [
        thing for thing in vars(errors).values()
        if getattr(thing, "__module__", "") == errors.__name__
    ]  # fmt: skip
    assert len(own) == 5
    assert all(issubclass(thing, errors.TerrasolError) for thing in own)
    assert not {"numpy", "click"} & loaded_after("import terrasol.words")
