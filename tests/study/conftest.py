from __future__ import annotations

import logging
import sys
from collections.abc import Callable, Iterator, Mapping
from pathlib import Path
from typing import Any

import pytest

sys.path.insert(0, str(Path(__file__).parent))


@pytest.fixture(scope="session")
def cluster_address(tmp_path_factory: pytest.TempPathFactory) -> Iterator[str]:
    """Two worker processes for all tests of this folder; they can import ``fake_work``."""
    import os

    import dask
    from distributed import LocalCluster

    here = str(Path(__file__).parent)
    options = {"distributed.scheduler.allowed-failures": 0, "distributed.scheduler.worker-saturation": 1.0}
    env = {"PYTHONPATH": os.pathsep.join([here, os.environ.get("PYTHONPATH", "")]), "OMP_NUM_THREADS": "1"}
    with (
        dask.config.set(options),
        LocalCluster(
            n_workers=2,
            threads_per_worker=1,
            processes=True,
            host="127.0.0.1",
            dashboard_address="127.0.0.1:0",
            silence_logs=logging.CRITICAL,
            env=env,
        ) as cluster,
    ):
        yield cluster.scheduler_address


@pytest.fixture
def make_study(tmp_path: Path) -> Callable[..., Path]:
    """Write a study of text files that ``fake_work.measure_text`` reads; returns its folder."""

    def make(files: Mapping[str, str], plan: str = "", folder: str = "study") -> Path:
        root = tmp_path / folder
        for name, text in files.items():
            path = root / name
            path.parent.mkdir(parents=True, exist_ok=True)
            path.write_text(text)
        root.mkdir(exist_ok=True)
        (root / "STUDY.toml").write_text(plan or PLAN)
        return root

    return make


PLAN = """
[study]
title = "Invented plates"
question = "Do the lots differ?"

[[images]]
file = "images/{group}_{specimen}_{section}.txt"
"""


@pytest.fixture
def lots() -> dict[str, str]:
    """Two lots of three specimens with two images each; numbers are layer thicknesses in nm."""
    files: dict[str, Any] = {}
    for g, group in enumerate("AB"):
        for s in range(3):
            for i in range(2):
                values = [200 + 10 * g + 2 * s + i + k for k in range(3)]
                files[f"images/{group}_{group.lower()}{s}_{i}.txt"] = " ".join(map(str, values))
    return files
