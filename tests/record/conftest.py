"""Parts of a record for its tests, and a place where even root may not write."""

import importlib.util
import os
import shutil
import tempfile
from contextlib import contextmanager
from pathlib import Path

import pytest

HERE = Path(__file__).parent
NOBODY = 65534


def _load(name):
    spec = importlib.util.spec_from_file_location(name, HERE / f"{name}.py")
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


@pytest.fixture(scope="session")
def parts():
    """The module record_parts."""
    return _load("record_parts")


@pytest.fixture
def path(tmp_path):
    return tmp_path / "run.trialrecord"


@pytest.fixture
def writer(parts, path):
    made = parts.new_writer(path)
    yield made
    made.close()


@contextmanager
def plain_user():
    """Permissions hold for root too while this lasts."""
    before = os.geteuid()
    if before == 0:
        os.seteuid(NOBODY)
    try:
        yield
    finally:
        os.seteuid(before)


@pytest.fixture
def as_plain_user():
    return plain_user


@pytest.fixture
def public_folder():
    """A directory that a plain user reaches and owns."""
    folder = Path(tempfile.mkdtemp())
    if os.geteuid() == 0:
        os.chown(folder, NOBODY, NOBODY)
    yield folder
    folder.chmod(0o700)
    shutil.rmtree(folder)
