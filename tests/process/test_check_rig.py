"""`trialrunner check` against the mock rig as a process: every shipped file and its plant agree."""

import os
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

from trialrunner.config import load
from trialrunner.exit_codes import ExitCode

pytestmark = pytest.mark.slow

CONFIGS = sorted((Path(__file__).parents[2] / "config").glob("*.toml"))


class Bench:
    """Starts mock rigs in a directory of their own and checks configurations on them."""

    def __init__(self, folder: Path) -> None:
        self._folder = folder
        self._rigs: list[subprocess.Popen[str]] = []

    def rig(self, plant: str, kind: str) -> str:
        """Start the plant; returns the URL under which a daemon reaches it."""
        path = f"{self._folder}/rig"
        url = f"pty://{path}" if kind == "serial" else f"zmq+ipc://{path}"
        command = [sys.executable, "-m", "mock_rig", "--plant", plant, "--link", url]
        rig = subprocess.Popen(command, stdout=subprocess.PIPE, text=True)
        self._rigs.append(rig)
        assert rig.stdout is not None
        assert rig.stdout.readline().startswith("{")
        return f"serial://{path}" if kind == "serial" else url

    def check(self, config: Path, *overrides: str) -> "subprocess.CompletedProcess[str]":
        command = [sys.executable, "-m", "trialrunner", "check", str(config)]
        for override in overrides:
            command += ["--set", override]
        # Wide, so that no table wraps.
        return subprocess.run(
            command,
            capture_output=True,
            text=True,
            check=False,
            env={**os.environ, "COLUMNS": "200"},
        )

    def close(self) -> None:
        for rig in self._rigs:
            rig.terminate()
            assert rig.wait(10) == 0
            assert rig.stdout is not None
            rig.stdout.close()


@pytest.fixture
def bench(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Iterator[Bench]:
    monkeypatch.setenv("XDG_RUNTIME_DIR", str(tmp_path))
    found = Bench(tmp_path)
    yield found
    found.close()


@pytest.mark.parametrize("path", CONFIGS, ids=lambda path: path.name)
def test_a_shipped_configuration_agrees_with_its_plant(bench: Bench, path: Path) -> None:
    """Over the link that its rehearsal uses; names, units, period and limits are compared."""
    rehearsal = load(path).rehearsal
    assert rehearsal is not None
    url = bench.rig(rehearsal.plant, rehearsal.link)
    done = bench.check(path, f"link.url={url}")
    assert done.stderr == ""
    assert done.returncode == ExitCode.OK
    assert "Rig and configuration agree." in done.stdout
    assert "Limits in force" in done.stdout
    assert "round trip" in done.stdout
