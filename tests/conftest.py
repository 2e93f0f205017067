"""What all tests share: a place for run files, and the open instances where they can be found."""

from __future__ import annotations

import os
import signal
from collections.abc import Callable
from pathlib import Path

import hypothesis
import pytest

hypothesis.settings.register_profile("settled", deadline=None, derandomize=True)
hypothesis.settings.register_profile("searching", deadline=None, max_examples=2000)
hypothesis.settings.load_profile("settled")


def pytest_configure() -> None:
    """Let interrupts through: a suite that was started in the background would hand down that they are ignored."""
    signal.signal(signal.SIGINT, signal.default_int_handler)


def pytest_collection_modifyitems(config: pytest.Config, items: list[pytest.Item]) -> None:
    """Leave slow tests out unless a -m expression speaks of them."""
    if "slow" in (config.getoption("-m") or ""):
        return
    skip = pytest.mark.skip(reason="slow; run with -m slow")
    for item in items:
        if "slow" in item.keywords:
            item.add_marker(skip)


@pytest.fixture(autouse=True)
def _in_a_folder_of_its_own(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Run files of default name land in a temporary folder, never in the checkout."""
    monkeypatch.chdir(tmp_path)


@pytest.fixture
def instance() -> Callable[[str], Path]:
    """The path of an open instance; skips, with the reason, where the folder is not to be had."""

    def find(name: str) -> Path:
        folder = os.environ.get("PATCHWALK_INSTANCES")
        if not folder:
            pytest.skip("open instances are looked for in the folder that PATCHWALK_INSTANCES names; it is not set")
        path = Path(folder) / name
        if not path.exists():
            pytest.skip(f"{path} is not there")
        return path

    return find
