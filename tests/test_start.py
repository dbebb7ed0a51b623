"""The newcomer's first command, in a fresh clone."""

from __future__ import annotations

import os
import shutil
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest

REPOSITORY = Path(__file__).parents[1]
WITHIN_S = 60.0
"""The demo shows all it has to show within a minute of its first word."""


@pytest.fixture
def index(tmp_path):
    """Skip where the package index cannot be reached: without it no newcomer can begin."""
    command = [sys.executable, "-m", "pip", "download", "--quiet", "--no-deps", "--no-cache-dir", "--retries", "0"]
    asked = subprocess.run([*command, "--dest", str(tmp_path / "asked"), "hatchling"], capture_output=True, text=True)
    if asked.returncode != 0:
        pytest.skip(f"no package can be had: {(asked.stderr.splitlines() or ['no reason given'])[-1]}")


@pytest.mark.timeout(400)
@pytest.mark.usefixtures("index")
@pytest.mark.skipif(shutil.which("git") is None or not (REPOSITORY / ".git").exists(), reason="no git checkout here")
def test_start_in_a_fresh_clone_shows_the_demo_within_a_minute_and_closes_with_what_to_type_next(tmp_path):
    """Installs from the package index, so it needs the network, as the newcomer does."""
    clone = tmp_path / "driftwatch"
    subprocess.run(["git", "clone", "--quiet", "--no-local", str(REPOSITORY), str(clone)], check=True)
    environment = {name: value for name, value in os.environ.items() if not name.startswith(("VIRTUAL_ENV", "PYTHON"))}
    with subprocess.Popen(
        ["bash", "tools/start"],
        cwd=clone,
        env=environment | {"PYTHONUNBUFFERED": "1"},
        stdout=subprocess.PIPE,
        stderr=subprocess.STDOUT,
        text=True,
        start_new_session=True,
    ) as demo:
        try:
            seen = _until_both_alerts(demo)
            os.killpg(demo.pid, signal.SIGINT)
            rest, _ = demo.communicate(timeout=20)
        finally:
            if demo.poll() is None:
                os.killpg(demo.pid, signal.SIGKILL)
    text = seen + rest
    assert demo.returncode == 0, text
    for expected in ("housing rocking", "grate bar", "cover plate", "±", "Hz", "tracking"):
        assert expected in seen
    assert "What next:" in rest
    assert "driftwatch readings" in rest
    assert "no protective system" in rest


def _until_both_alerts(demo: subprocess.Popen[str]) -> str:
    """Return what was printed until a frequency and a Q have left their bands; fail after a minute of running."""
    assert demo.stdout is not None
    text, began = "", None
    for line in demo.stdout:
        text += line
        if "Watching" in line:
            began = time.monotonic()
        if "frequency" in text and "below 75" in text and text.count("ALERT") >= 2:
            assert began is not None
            assert time.monotonic() - began < WITHIN_S, text
            return text
    pytest.fail(f"the demo ended by itself:\n{text}")
