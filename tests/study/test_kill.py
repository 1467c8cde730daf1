from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest

from layerscan.study.ledger import Ledger

TARGET = Path(__file__).with_name("kill_target.py")


def start(folder: Path, *words: str) -> subprocess.Popen:
    command = [sys.executable, str(TARGET), str(folder), *words]
    return subprocess.Popen(command, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)


def kill_tree(process: subprocess.Popen) -> None:
    """Kill the process that this test started and its children, each by its id; the parent first."""
    import psutil

    try:
        children = psutil.Process(process.pid).children(recursive=True)
    except psutil.NoSuchProcess:
        children = []
    process.kill()
    process.wait()
    for child in children:
        try:
            os.kill(child.pid, signal.SIGKILL)
        except ProcessLookupError:
            continue


def read_content(folder: Path) -> list[tuple]:
    with Ledger(folder) as ledger:
        assert ledger.check_integrity() == []
        return ledger.content()


def kill_again_and_again(make_study, *words: str, kills: int, seed: int, files: int) -> None:
    """Kill runs at random moments until ``kills`` are used up; every finished ledger must equal the undisturbed one."""
    rng = np.random.default_rng(seed)
    texts = {
        f"images/{'AB'[k % 2]}_{'ab'[k % 2]}{k % 6}_{k}.txt": f"{200 + k} {201 + k} {203 + k} slow"
        for k in range(files)
    }
    texts["images/A_a0_bad.txt"] = "no numbers: crash"
    undisturbed = make_study(texts, folder="undisturbed")
    begun = time.monotonic()
    assert start(undisturbed, *words).wait() == 0
    whole = time.monotonic() - begun
    expected = read_content(undisturbed)
    assert len(expected) == 4 * files + 1
    used = round_number = 0
    while used < kills:
        folder = make_study(texts, folder=f"round{round_number}")
        round_number += 1
        for attempt in range(min(kills - used, 8)):
            process, begun = start(folder, *words), time.monotonic()
            try:
                process.wait(timeout=float(rng.uniform(0.2, 1.0) * whole))
                if attempt == 0:  # the machine has become faster: kill earlier
                    whole = min(whole, time.monotonic() - begun)
                break
            except subprocess.TimeoutExpired:
                used += 1
                kill_tree(process)
        assert start(folder, *words).wait() == 0
        assert read_content(folder) == expected


def test_a_killed_run_goes_on_and_ends_as_if_it_had_not_been_killed(make_study):
    # issue: "kills the process tree ... the final ledger equals the uninterrupted one, nothing lost, nothing double";
    # small version
    kill_again_and_again(make_study, kills=2, seed=1, files=20)


@pytest.mark.slow
@pytest.mark.timeout(3600)
def test_two_hundred_kills_at_random_moments(make_study):
    # the number
    kill_again_and_again(make_study, "whole", kills=200, seed=2, files=60)
