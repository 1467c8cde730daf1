"""What the engine of a study costs beside the work itself, as ratios within one run.

    python benchmarks/study_engine.py [--images 1000] [--work-s 0.3]

Invented text files stand for images; the work on each is a fixed amount of processor time (a loop) and returns a
measurement of 40 layers, which the ledger keeps. Measured are
- the engine's own processor time (this process: scheduling, ledger, exports are not counted) over that of the work;
- the time by the clock of one worker over that of two, with work that waits instead of computing, so that other
  programs on the machine do not count (a tenth of the images, at least 60);
- memory of this process after a tenth of the images and at the end;
- the processor time a row of a plan with ten times the rows costs, over that of the shorter one; with the default size
  the longer plan has a million rows.
Bounds: cost below 5 %, two workers at least 1.8 times one, memory within 1.15, rows within 1.5. Results:
benchmarks/results/study.json.
"""

from __future__ import annotations

import argparse
import json
import os
import resource
import tempfile
import time
from pathlib import Path

from layerscan.study.ledger import Ledger
from layerscan.study.plan import read_plan
from layerscan.study.runner import run_units
from layerscan.study.tasks import list_tasks
from layerscan.study.work import StepResult, Unit, UnitResult

BOUNDS = {"engine_over_work": 0.05, "one_over_two_workers": 1.8, "memory_end_over_tenth": 1.15, "cost_a_row": 1.5}


def work(unit: Unit) -> UnitResult:
    """Compute or wait for as long as the file says, then hand back a measurement of 40 layers."""
    kind, seconds = Path(unit.path).read_text().split()[:2]
    if kind == "wait":
        time.sleep(float(seconds))
    start = time.process_time()
    total, number = 0.0, 1
    while kind == "compute" and time.process_time() - start < float(seconds):
        total += 1.0 / number
        number += 1
    step = unit.steps[0]
    document = {
        "layered": True,
        "period_nm": {"mean": 200.0, "u": 1.0, "sd": 2.0, "n": 20},
        "boundaries": [{"index": i, "depth_nm": 100.0 * i, "u_nm": 1.0, "flags": []} for i in range(41)],
        "profile": {"depth_nm": [0.1 * i for i in range(800)], "intensity": [0.5] * 800},
    }
    layers = tuple((i, "dark", 100.0 + i, 1.0, 0.5, 1, "") for i in range(40))
    result = StepResult(
        step=step,
        state="done",
        document=document,
        picture=os.urandom(8_000),
        layers=layers,
        seconds=time.process_time() - start,
    )
    return UnitResult(key=unit.key, results=(result,), versions={"layerscan": "benchmark"})


def make_study(folder: Path, *, images: int, kind: str, seconds: float) -> Path:
    (folder / "images").mkdir(parents=True)
    for i in range(images):
        (folder / "images" / f"g{i % 2}_s{i % 20}_{i}.txt").write_text(f"{kind} {seconds} {i}")
    (folder / "STUDY.toml").write_text('[[images]]\nfile = "images/{group}_{specimen}_{section}.txt"\n')
    return folder


def memory_mib() -> float:
    """Resident memory of this process now; its peak where the system does not say."""
    try:
        pages = int(Path("/proc/self/statm").read_text().split()[1])
        return pages * os.sysconf("SC_PAGE_SIZE") / 2**20
    except OSError:
        return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024


def run(folder: Path, *, workers: int) -> dict[str, float]:
    """Run the study without report; returns processor time here and in the work, clock time and memory."""
    plan = read_plan(folder)
    memory: list[tuple[float, float]] = []
    clock: list[float] = []

    def note(what: str, fraction: float | None) -> None:
        if fraction is not None and " files, " in what:
            memory.append((fraction, memory_mib()))
            clock.append(time.monotonic())

    start = time.process_time()
    with Ledger(folder, write=True) as ledger:
        tasks = list_tasks(plan, ledger, folder)
        ledger.write_plan({}, tasks.rows)
        run_units(tasks.units, work=work, ledger=ledger, run=plan.tables.run, workers=workers, progress=note)
        engine = time.process_time() - start
        done = [ledger.task(unit.tasks["measure"]) for unit in ledger.units()]
    tenth = next(value for fraction, value in memory if fraction >= 0.1)
    return {
        "engine_s": engine,
        "work_s": sum(task.seconds for task in done),
        "clock_s": clock[-1] - clock[0],  # from the first result: starting processes is not counted
        "memory_tenth": tenth,
        "memory_end": memory[-1][1],
        "done": sum(task.state == "done" for task in done),
    }


def plan_cost(folder: Path, rows: int) -> float:
    """Processor time a row of a plan with so many rows."""
    lines = ["file,group,specimen", *(f"i/{i}.tif,g{i % 2},s{i % 50}" for i in range(rows))]
    (folder / "list.csv").write_text("\n".join(lines))
    (folder / "STUDY.toml").write_text('images = "list.csv"\n')
    start = time.process_time()
    assert len(read_plan(folder).images) == rows
    return (time.process_time() - start) / rows


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--images", type=int, default=1000)
    parser.add_argument("--work-s", type=float, default=0.3)
    options = parser.parse_args()
    with tempfile.TemporaryDirectory() as name:
        root = Path(name)
        long = run(make_study(root / "long", images=options.images, kind="compute", seconds=options.work_s), workers=2)
        few = max(60, options.images // 10)
        clocks = [
            run(make_study(root / f"wait{n}", images=few, kind="wait", seconds=options.work_s), workers=n)["clock_s"]
            for n in (1, 2)
        ]
        (root / "plan").mkdir()
        short, full = (plan_cost(root / "plan", options.images * scale) for scale in (100, 1000))
    ratios = {
        "engine_over_work": long["engine_s"] / long["work_s"],
        "one_over_two_workers": clocks[0] / clocks[1],
        "memory_end_over_tenth": long["memory_end"] / long["memory_tenth"],
        "cost_a_row": full / short,
    }
    met = {name: (v >= BOUNDS[name]) if "workers" in name else (v <= BOUNDS[name]) for name, v in ratios.items()}
    report = {
        "images": options.images,
        "work_s": options.work_s,
        "rows": options.images * 1000,
        "done": long["done"],
        "ratios": {name: round(value, 4) for name, value in ratios.items()},
        "bounds": BOUNDS,
        "met": met,
    }
    print(json.dumps(report, indent=1))
    path = Path(__file__).parent / "results" / "study.json"
    path.parent.mkdir(exist_ok=True)
    path.write_text(json.dumps(report, indent=1) + "\n")


if __name__ == "__main__":
    main()
