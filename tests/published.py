"""Published records for tests, fetched from the package index at test time and never committed.

They lie in the source archive of the package jcamp 1.3.2 (its wheel holds none): ``RJL/`` are the
test files of R. J. Lancashire, UWI Mona (headers: public domain), ``OFF/`` the JCAMP-DX 5.00 test
files of P. Lampen and J. Lambert, ISAS Dortmund, 1992, ``TEST/`` further ones.
"""

from __future__ import annotations

import functools
import hashlib
import os
import subprocess
import sys
import tarfile
import tempfile
from fnmatch import fnmatchcase
from pathlib import Path

import pytest

ARCHIVE = "jcamp-1.3.2.tar.gz"
SHA256 = "27ce753f5bb2601d3138fc2a4787c0049deb0ab51ce052cb62806bcbd12eddb9"
FOLDERS = {
    "RJL": "jcamp-1.3.2/data/Robert_J_Lancashire_test_data",
    "OFF": "jcamp-1.3.2/data/jcamp-dx.org_official_test_data",
    "TEST": "jcamp-1.3.2/data/test",
    "HNMR": "jcamp-1.3.2/data/hnmr_spectra",
}


@functools.cache
def published_file(name: str) -> Path:
    """The path of a published file such as ``RJL/ofid1.jdx``, fetched where it is not there yet.

    A pattern such as ``OFF/*AFFN.DX`` must fit one file. Where the file cannot be had the test is
    skipped with the reason, or fails where CI is set.
    """
    folder, _, pattern = name.partition("/")
    with tarfile.open(_archive()) as tar:
        wanted = f"{FOLDERS[folder]}/{pattern}"
        (member,) = [item for item in tar.getmembers() if fnmatchcase(item.name, wanted)]
        target = _cache() / folder / Path(member.name).name
        if not target.exists():
            content = tar.extractfile(member)
            assert content is not None
            _put(target, content.read())
    return target


def _cache() -> Path:
    return Path(os.environ.get("FIDKIT_TEST_CACHE") or Path.home() / ".cache" / "fidkit-tests")


def _archive() -> Path:
    found = _fetched()
    if isinstance(found, str):
        text = f"the published test records cannot be fetched: {found}"
        if os.environ.get("CI"):
            pytest.fail(text, pytrace=False)
        pytest.skip(text)
    return found


@functools.cache
def _fetched() -> Path | str:
    """The archive, or why it cannot be had; asked for once only."""
    target = _cache() / ARCHIVE
    if not _is_right(target):
        with tempfile.TemporaryDirectory() as folder:
            # one package by name and version; --no-binary, since only the source holds the data
            command = [sys.executable, "-m", "pip", "download", "--quiet", "--no-deps"]
            command += ["--no-binary", "jcamp", "--dest", folder, "jcamp==1.3.2"]
            try:
                done = subprocess.run(command, capture_output=True, text=True, timeout=300)
            except (OSError, subprocess.TimeoutExpired) as error:
                return str(error)
            fetched = Path(folder) / ARCHIVE
            if done.returncode or not fetched.exists():
                return (done.stderr.strip().splitlines() or ["pip fetched no archive"])[-1]
            if not _is_right(fetched):
                return f"{ARCHIVE} has another sha256 than {SHA256}"
            _put(target, fetched.read_bytes())
    return target


def _is_right(path: Path) -> bool:
    return path.exists() and hashlib.sha256(path.read_bytes()).hexdigest() == SHA256


def _put(target: Path, content: bytes) -> None:
    """Whole or not at all: several test processes may do it at once."""
    target.parent.mkdir(parents=True, exist_ok=True)
    handle, name = tempfile.mkstemp(dir=target.parent)
    with os.fdopen(handle, "wb") as file:
        file.write(content)
    os.replace(name, target)
