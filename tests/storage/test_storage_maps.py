"""Versions of maps: kept as they were written, and never another."""

from __future__ import annotations

import shutil
import threading
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import pytest
from sqlalchemy import Engine

from fhirgallop.errors import SettingsError
from fhirgallop.mapping.reading import read_map
from fhirgallop.service.shelf import keep_versions, load_shelf
from fhirgallop.storage.maps import KeptMap, MapStore

AT, LATER = "2026-12-01T08:30:00Z", "2026-12-02T08:30:00Z"


def test_a_version_is_kept_as_it_was_written(engine: Engine) -> None:
    store = MapStore(engine)
    assert store.keep("form", "1", b"one", at=AT)
    assert store.keep("form", "1", b"one", at=LATER)  # again the same: as it was
    assert not store.keep("form", "1", b"two", at=LATER)
    assert store.keep("form", "2", b"two", at=LATER)
    assert store.text("form", "1") == b"one"
    assert store.text("form", "2") == b"two"
    assert store.text("form", "3") is None
    assert store.versions() == [KeptMap("form", "1", AT), KeptMap("form", "2", LATER)]


def test_of_two_who_keep_one_version_at_once_both_or_one_is_content(engine: Engine) -> None:
    store = MapStore(engine)
    for texts in ((b"same", b"same"), (b"one", b"another")):
        together = threading.Barrier(2)

        def go(text: bytes, name: str = texts[1].decode(), together: threading.Barrier = together) -> bool:
            together.wait()
            return store.keep(name, "1", text, at=AT)

        with ThreadPoolExecutor(2) as pool:
            kept = list(pool.map(go, texts))
        assert kept.count(True) == (2 if texts[0] == texts[1] else 1)


def test_a_changed_map_needs_a_new_version(engine: Engine, root: Path, tmp_path: Path) -> None:
    store = MapStore(engine)
    path = tmp_path / "bedside.yaml"
    shutil.copy(root / "tests/cases/faces/maps/bedside.yaml", path)
    (first,) = load_shelf(tmp_path).values()
    keep_versions(load_shelf(tmp_path), store, at=AT)
    keep_versions(load_shelf(tmp_path), store, at=LATER)
    path.write_bytes(first.text + b"\n# changed\n")
    with pytest.raises(SettingsError, match=r"bedside.*raise `version` in the file"):
        keep_versions(load_shelf(tmp_path), store, at=LATER)
    version = f'version: "{first.template.version}"'.encode()
    assert version in path.read_bytes()
    path.write_bytes(path.read_bytes().replace(version, b"version: 2099.1"))
    keep_versions(load_shelf(tmp_path), store, at=LATER)
    # the old one is still there, and can still be read
    text = store.text(first.template.name, first.template.version)
    assert text == first.text
    template, issues = read_map(text)
    assert template
    assert not issues
    assert template.stamp == first.template.stamp
