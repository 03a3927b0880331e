"""Files by content, and arrays as bytes."""

from __future__ import annotations

import stat

import numpy as np
import pytest

from labsite.errors import NotVisible
from spectra import arrays, store
from spectra.core import formats
from tests import builders


@pytest.fixture(autouse=True)
def own_folder(settings, tmp_path):
    settings.FILES_DIR = tmp_path


def test_what_is_put_is_got_and_stored_once(tmp_path):
    name = store.put(b"bytes")
    assert store.put(b"bytes") == name and store.get(name) == b"bytes"
    files = [path for path in tmp_path.rglob("*") if path.is_file()]
    assert files == [store.path_of(name)]
    assert not files[0].stat().st_mode & (stat.S_IWUSR | stat.S_IWGRP | stat.S_IWOTH)


def test_altered_bytes_are_never_handed_out():
    name = store.put(b"bytes")
    store.path_of(name).chmod(0o640)
    store.path_of(name).write_bytes(b"bytez")
    with pytest.raises(store.Damaged):
        store.get(name)
    with pytest.raises(NotVisible):
        store.get("0" * 64)


def test_a_failed_write_leaves_nothing(tmp_path, monkeypatch):
    def fail(*args):
        raise OSError("no space left")

    monkeypatch.setattr("os.replace", fail)
    with pytest.raises(OSError):
        store.put(b"bytes")
    assert [path for path in tmp_path.rglob("*") if path.is_file()] == []


def test_curves_come_back_as_they_were_packed():
    curves = {"b": np.arange(5.0), "a": np.array([np.nan, 1.5])}
    back = arrays.unpack_curves(arrays.pack_curves(curves))
    assert sorted(back) == ["a", "b"]
    np.testing.assert_array_equal(back["b"], curves["b"])
    np.testing.assert_array_equal(back["a"], curves["a"])
    assert arrays.pack_curves(dict(reversed(curves.items()))) == arrays.pack_curves(curves)
    with pytest.raises(ValueError):
        arrays.unpack_curves(b"something else")


def test_the_digest_of_a_block_follows_its_numbers():
    one, two = (formats.read(builders.jcamp_file(seed=seed)).blocks[0] for seed in (1, 2))
    again = formats.read(builders.jcamp_file(seed=1, title="another title")).blocks[0]
    assert arrays.block_digest(one) == arrays.block_digest(again) != arrays.block_digest(two)
