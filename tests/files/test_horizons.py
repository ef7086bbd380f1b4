"""Horizons on disk: found again for the same ground only, and only if they are whole."""

import json
from pathlib import Path

import numpy as np
import pytest

import terrasol
from files.made import GRID, UTM, hills
from terrasol.errors import OutputError
from terrasol.files import horizons
from terrasol.files.horizons import (
    HEADER,
    VARIABLE,
    HorizonDraft,
    default_folder,
    find_horizons,
    horizon_key,
)

METHOD = {"azimuths": 8, "refraction": 0.13}


def ground(change=0.0, crs=UTM, grid=GRID):
    heights = hills()
    heights[3, 4] += change
    return terrasol.Elevation.from_array(heights, tuple(grid)[:6], crs)


def code(seed=0):
    return np.random.default_rng(seed).integers(0, 65536, (8, 20, 30)).astype(np.uint16)


def kept(store, key="abc"):
    with HorizonDraft(store, key) as draft:
        draft.write(0, 0, code(0))
        draft.write(0, 256, code(1))
        return draft.finish({"note": 3})


def test_what_is_kept_is_found(tmp_path):
    kept(tmp_path / "new" / "store")
    found = find_horizons(tmp_path / "new" / "store", "abc")
    assert found.notes == {"note": 3}
    np.testing.assert_array_equal(found.block(0, 256), code(1))
    assert isinstance(found.block(0, 0), np.memmap)  # never read whole
    assert find_horizons(tmp_path / "new" / "store", "abd") is None
    assert find_horizons(tmp_path / "nowhere", "abc") is None


def test_key_follows_ground_and_settings():
    keys = [
        horizon_key(ground(), METHOD),
        horizon_key(ground(0.01), METHOD),
        horizon_key(ground(crs="EPSG:32633"), METHOD),
        horizon_key(ground(grid=(50, 0, 4e5 + 50, 0, -50, 5.15e6)), METHOD),
        horizon_key(ground(), METHOD | {"azimuths": 16}),
        horizon_key(ground(), METHOD | {"refraction": 0.0}),
        horizon_key(ground(), METHOD, ground(1.0)),
        horizon_key(ground(), METHOD, ground(2.0)),
    ]
    assert len(set(keys)) == len(keys)
    assert horizon_key(ground(), dict(reversed(METHOD.items()))) == keys[0]


def test_unfinished_leaves_nothing(tmp_path):
    with HorizonDraft(tmp_path, "abc") as draft:
        draft.write(0, 0, code())
        assert find_horizons(tmp_path, "abc") is None
    assert list(tmp_path.iterdir()) == []
    assert find_horizons(tmp_path, "abc") is None


def spoil_a_byte(folder):
    path = folder / "0-256.npy"
    data = bytearray(path.read_bytes())
    data[-100] ^= 1
    path.write_bytes(data)


def spoil_header(change):
    def spoil(folder):
        header = json.loads((folder / HEADER).read_text())
        change(header)
        (folder / HEADER).write_text(json.dumps(header))

    return spoil


@pytest.mark.parametrize(
    "spoil",
    [
        spoil_a_byte,
        lambda folder: (folder / "0-0.npy").write_bytes((folder / "0-0.npy").read_bytes()[:-1]),
        lambda folder: (folder / "0-0.npy").unlink(),
        lambda folder: (folder / HEADER).unlink(),
        lambda folder: (folder / HEADER).write_text("{"),
        lambda folder: (folder / HEADER).write_text("[1]"),
        spoil_header(lambda header: header.update(format=999)),
        spoil_header(lambda header: header.pop("notes")),
        spoil_header(lambda header: header.update(blocks={"0-0.npy": 3})),
    ],
)
def test_damage_is_seen_and_replaced(tmp_path, spoil):
    spoil(kept(tmp_path).folder)
    assert find_horizons(tmp_path, "abc") is None
    kept(tmp_path)
    np.testing.assert_array_equal(find_horizons(tmp_path, "abc").block(0, 256), code(1))
    assert [path.name for path in tmp_path.iterdir()] == ["abc"]


def test_block_that_has_gone_is_told(tmp_path):
    found = kept(tmp_path)
    (found.folder / "0-0.npy").unlink()
    with pytest.raises(OutputError, match=r"0-0\.npy.*run again"):
        found.block(0, 0)


def test_folder_that_cannot_be_made(tmp_path):
    (tmp_path / "file").write_text("")
    with pytest.raises(OutputError, match="horizons could not be kept"):
        HorizonDraft(tmp_path / "file", "abc").__enter__()


def test_default_folder(monkeypatch, tmp_path):
    monkeypatch.setenv(VARIABLE, str(tmp_path / "own"))
    assert default_folder() == tmp_path / "own"
    monkeypatch.delenv(VARIABLE)
    monkeypatch.setattr(horizons.sys, "platform", "linux")
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path))
    assert default_folder() == tmp_path / "terrasol" / "horizons"
    monkeypatch.delenv("XDG_CACHE_HOME")
    assert default_folder() == Path("~/.cache/terrasol/horizons").expanduser()
