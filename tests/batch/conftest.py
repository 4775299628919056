"""Folders with small plants and a job file, and real runs."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path

import pytest
from batch_helpers import CONVERT, HEAD, plant


@pytest.fixture
def folder(tmp_path: Path) -> Callable[..., Path]:
    """Make plants and a job file."""

    def make(count: int, text: str = HEAD + CONVERT) -> Path:
        (tmp_path / "plants").mkdir(exist_ok=True)
        for k in range(count):
            (tmp_path / "plants" / f"p{k:04d}.json").write_text(json.dumps(plant(k)))
        (tmp_path / "jobs.toml").write_text(text)
        return tmp_path

    return make


@pytest.fixture
def start() -> Callable[..., subprocess.Popen[bytes]]:
    """Start a run in a process group of its own."""

    def call(folder: Path, *options: str) -> subprocess.Popen[bytes]:
        return subprocess.Popen(
            [sys.executable, "-m", "realize", "run", "jobs.toml", *options],
            cwd=folder,
            stdout=subprocess.PIPE,
            stderr=subprocess.PIPE,
            env={**os.environ, "OMP_NUM_THREADS": "1"},
        )

    return call
