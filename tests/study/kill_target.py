"""Runs the study in the folder given, to be killed at any moment: python kill_target.py FOLDER [whole].

With ``whole`` tables and page are written too; without, it stops after the ledger, which starts faster.
"""

from __future__ import annotations

import sys
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parent))


def run_ledger_only(folder: Path) -> None:
    import fake_work

    from layerscan.study.ledger import Ledger
    from layerscan.study.plan import read_plan
    from layerscan.study.runner import run_units
    from layerscan.study.tasks import list_tasks

    plan = read_plan(folder)
    with Ledger(folder, write=True) as ledger:
        tasks = list_tasks(plan, ledger, folder)
        ledger.write_plan({}, tasks.rows)
        run_units(tasks.units, work=fake_work.measure_text, ledger=ledger, run=plan.tables.run, workers=2)


def run_whole(folder: Path) -> None:
    import fake_work

    from layerscan.study.session import run_study

    run_study(folder, workers=2, work=fake_work.measure_text)


if __name__ == "__main__":
    (run_whole if "whole" in sys.argv else run_ledger_only)(Path(sys.argv[1]))
