"""What a result was made of."""

import pytest

from terrasol.errors import InputError
from terrasol.files.provenance import run_record, sha256, versions


def test_hash(tmp_path):
    """FIPS 180-2, appendix B.1: the message 'abc'."""
    path = tmp_path / "x"
    path.write_bytes(b"abc")
    assert sha256(path) == "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad"


def test_hash_of_nothing(tmp_path):
    with pytest.raises(InputError, match="cannot be read"):
        sha256(tmp_path / "missing")


def test_versions_are_those_in_use():
    import numpy
    import rasterio

    found = versions()
    assert found["numpy"] == numpy.__version__
    assert found["gdal"] == rasterio.__gdal_version__
    assert set(found) >= {"terrasol", "python", "numba", "pyproj", "pvlib", "rasterio"}


def test_record(tmp_path):
    dem = tmp_path / "dem.tif"
    dem.write_bytes(b"abc")
    record = run_record("terrain", dem, {"azimuths": 64})
    assert record["input"] == {"file": str(dem), "sha256": sha256(dem)}
    assert record["settings"] == {"azimuths": 64}
    assert record["started"].endswith("+00:00")


def test_what_is_no_file_has_no_hash():
    record = run_record("terrain", "/vsizip/ground.zip/dem.tif", {})
    assert record["input"] == {"file": "/vsizip/ground.zip/dem.tif", "sha256": None}
