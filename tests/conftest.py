"""Shared by all tests."""

import hashlib
import os
import tempfile
from pathlib import Path

import pytest

_ROOT = Path(__file__).parents[1]


def _source_digest():
    digest = hashlib.sha256()
    for path in sorted((_ROOT / "chansim").rglob("*.py")):
        digest.update(path.read_bytes())
    return digest.hexdigest()[:16]


# numba's cache looks at one file at a time: a kernel that calls a changed kernel
# of another file would stay old. A folder for each state of the sources avoids that.
os.environ.setdefault("NUMBA_CACHE_DIR", str(Path(tempfile.gettempdir()) / f"chansim-compiled-{_source_digest()}"))

import chansim  # noqa: E402, F401

SHARED = _ROOT.parent / "shared"


@pytest.fixture(scope="session")
def line_folder():
    """Folder with line lists; the test is skipped where there is none."""
    folder = SHARED / "spectroscopy"
    if not (folder / "h2o.par").exists():
        pytest.skip("needs the line lists in ../shared/spectroscopy, which are not part of the repository")
    return folder


@pytest.fixture(scope="session")
def tarn():
    """The built-in imager, all channels."""
    from chansim.channels.imager import load_imager

    return load_imager("tarn")
