from __future__ import annotations

import json
from pathlib import Path

import fake_work
import pytest

from layerscan.errors import InputError, Interrupted, LayerscanError, SettingsError
from layerscan.study import session
from layerscan.study.ledger import Ledger
from layerscan.study.notebook import open_study
from layerscan.study.plan import read_plan
from layerscan.study.tasks import list_tasks


@pytest.fixture
def run(cluster_address):
    def start(folder, **more):
        return session.run_study(folder, cluster=cluster_address, work=fake_work.measure_text, **more)

    return start


def ledger_content(folder: Path) -> list[tuple]:
    with Ledger(folder) as ledger:
        assert ledger.check_integrity() == []
        return ledger.content()


def test_a_study_runs_and_a_second_run_computes_nothing(make_study, lots, run):
    # issue: "Interrupt at any moment and run again: only what is missing ... is computed"
    folder = make_study(lots)
    first = run(folder)
    assert (first.images, first.done, first.worked_on, first.exit_code) == (12, 12, 12, 0)
    before = ledger_content(folder)
    second = run(folder)
    assert (second.worked_on, second.kept, second.done) == (0, 12, 12)
    assert ledger_content(folder) == before


def test_only_what_changed_is_computed_again(make_study, lots, run):
    # changed: file hash; set differently: settings hash; missing: a new file
    folder = make_study(lots)
    run(folder)
    (folder / "images/A_a0_0.txt").write_text("300 301 302")
    (folder / "images/A_a9_0.txt").write_text("210 211")
    assert run(folder).worked_on == 2
    (folder / "images/A_a0_1.txt").touch()
    assert run(folder).worked_on == 0
    plan = (folder / "STUDY.toml").read_text()
    (folder / "STUDY.toml").write_text('[measure]\nobliquity = "5 deg"\n' + plan)
    assert run(folder).worked_on == 13
    (folder / "STUDY.toml").write_text(plan)
    assert run(folder).worked_on == 0  # results of the former settings are still there


def test_check_says_what_would_run_and_runs_nothing(make_study, lots, run):
    # issue: "layerscan study --check"
    folder = make_study(lots)
    found = session.run_study(folder, check=True)
    assert (found.images, found.to_measure, found.done) == (12, 12, 0)
    assert not (folder / "study.sqlite").exists()
    run(folder)
    (folder / "images/A_a0_0.txt").unlink()
    (folder / "images/B_b0_0.txt").write_text("7 8 9")
    plan = (folder / "STUDY.toml").read_text()
    (folder / "STUDY.toml").write_text(plan + '[[images]]\nfile = "gone.txt"\nspecimen = "x"\n')
    found = session.check_study(folder)
    assert (found.to_measure, found.done) == (1, 10)
    assert any("gone.txt" in text for text in found.missing)
    assert "preparation.fixation" in found.not_stated
    assert "STUDY.toml, line 8, images[2]: image 'gone.txt' is missing" in found.missing


def test_poison_deadline_memory_and_bugs_end_as_failures_and_blame_no_other(make_study, lots, run):
    # issue: "a poisonous image ends as a recorded failure and blames no other"; two retries
    trouble = {
        "images/A_a0_0.txt": "200 kill",
        "images/A_a1_0.txt": "200 sleep",
        "images/B_b0_0.txt": "200 memory",
        "images/B_b1_0.txt": "200 crash",
        "images/B_b2_0.txt": "212 once",
    }
    plan = '[run]\ndeadline_s = 1.0\nmemory_mib = 512\n[[images]]\nfile = "images/{group}_{specimen}_{section}.txt"\n'
    folder = make_study({**lots, **trouble}, plan)
    outcome = run(folder)
    assert (outcome.done, outcome.failed, outcome.exit_code) == (8, 4, 5)
    images = open_study(folder).images.set_index("path")
    with Ledger(folder) as ledger:
        tasks = {u.row["path"]: ledger.task(u.tasks["measure"]) for u in ledger.units()}
    kinds = {path: (tasks[path].failure, tasks[path].attempts) for path in trouble}
    assert kinds == {
        "images/A_a0_0.txt": ("worker lost", 3),
        "images/A_a1_0.txt": ("deadline", 3),
        "images/B_b0_0.txt": ("memory", 3),
        "images/B_b1_0.txt": ("unexpected error", 3),
        "images/B_b2_0.txt": (None, 2),
    }
    assert "took longer than 1 s" in images.loc["images/A_a1_0.txt", "reason"]
    assert "ZeroDivisionError: a bug" in images.loc["images/B_b1_0.txt", "reason"]
    innocent = [path for path in lots if path not in trouble]
    assert all(tasks[path].state == "done" for path in innocent)


@pytest.mark.slow
def test_a_cluster_with_its_own_retries_and_two_threads_a_worker_blames_no_other(make_study, monkeypatch):
    # dask's own settings: a task is tried on four workers before it fails, and a worker's tasks die with it
    from distributed import LocalCluster

    monkeypatch.setenv("PYTHONPATH", str(Path(__file__).parent))
    files = {f"images/A_{k}_0.txt": f"{200 + k} {201 + k} slow" for k in range(20)}
    files["images/A_3_0.txt"] = "203 kill"
    folder = make_study(files)
    with LocalCluster(n_workers=2, threads_per_worker=2, dashboard_address="127.0.0.1:0", silence_logs=50) as cluster:
        outcome = session.run_study(folder, cluster=cluster.scheduler_address, work=fake_work.measure_text)
    assert (outcome.done, outcome.failed) == (19, 1)
    assert outcome.failures[0][0] == "images/A_3_0.txt"


def test_an_interrupted_run_goes_on_where_it_stopped(make_study, lots, run):
    # records.Progress: raising Interrupted in the callback stops the run
    folder = make_study({name: text + " slow" for name, text in lots.items()})
    calls = []

    def stop(what: str, fraction: float | None) -> None:
        calls.append((what, fraction))
        if " files, " in what and fraction and fraction > 0.3:
            raise Interrupted("stop")

    with pytest.raises(Interrupted):
        run(folder, progress=stop)
    with Ledger(folder) as ledger:
        states = [state for state, _ in ledger.states().values()]
    assert 0 < states.count("done") < 12
    assert session.report_study(folder).missing == 12 - states.count("done")
    rest = run(folder)
    assert rest.worked_on == 12 - states.count("done")
    assert rest.missing == 0
    other = make_study({name: text + " slow" for name, text in lots.items()}, folder="other")
    run(other)
    assert ledger_content(folder) == ledger_content(other)


def test_progress_says_rate_and_remaining_time(make_study, lots, run):
    # issue: "Progress with rate and remaining time"
    seen = []
    run(make_study(lots), progress=lambda what, fraction: seen.append((what, fraction)))
    words, fraction = seen[-1]
    assert words.startswith("12 of 12 files, ")
    assert words.endswith(" left")
    assert "/s" in words
    assert fraction == 1.0


def test_missing_files_and_duplicates_fail_and_the_rest_runs(make_study, lots, run):
    # issue: "duplicate images", "missing files"; copies under another name have the same bytes
    lots["images/A_a7_0.txt"] = lots["images/A_a0_0.txt"]
    plan = (
        '[[images]]\nfile = "images/{group}_{specimen}_{section}.txt"\n'
        '[[images]]\nfile = "gone.txt"\ngroup = "A"\nspecimen = "z"\n'
    )
    outcome = run(make_study(lots, plan))
    assert (outcome.done, outcome.failed, outcome.exit_code) == (12, 2, 5)
    reasons = dict(outcome.failures)
    assert "same bytes as 'images/A_a0_0.txt'" in reasons["images/A_a7_0.txt"]
    assert "is missing" in reasons["gone.txt"]


def test_nothing_starts_where_no_image_can_be_read(make_study, run):
    # INTERFACE: exit code 3, input unusable, nothing could start
    folder = make_study({}, '[[images]]\nfile = "a.txt"\nspecimen = "1"\n')
    with pytest.raises(InputError, match=r"No image of the study can be read\. The first: 'a\.txt' is missing"):
        run(folder)


def test_a_full_disk_stops_the_run_and_records_no_false_failure(make_study, lots, run):
    # issue: "full disk (simulated)": a worker meets ENOSPC
    folder = make_study({**lots, "images/B_b2_1.txt": "200 full"})
    with pytest.raises(LayerscanError, match=r"The disk is full while 'images/B_b2_1\.txt' was written"):
        run(folder)
    with Ledger(folder) as ledger:
        assert all(state == "done" for state, _ in ledger.states().values())
    (folder / "images/B_b2_1.txt").write_text(lots["images/B_b2_1.txt"])
    assert run(folder).exit_code == 0


def test_results_may_go_to_another_folder(make_study, lots, run, tmp_path):
    # a plan may lie where nothing can be written
    folder = make_study(lots)
    outcome = run(folder, out=tmp_path / "elsewhere")
    assert sorted(p.name for p in folder.iterdir()) == ["STUDY.toml", "images"]
    names = {Path(name).name for name in outcome.written}
    assert names == {"results.csv", "layers.csv", "results.parquet", "layers.parquet", "report.html"}
    assert session.report_study(tmp_path / "elsewhere").done == 12


def test_the_report_needs_neither_plan_nor_images(make_study, lots, run, tmp_path):
    # the ledger alone holds every result
    folder = make_study(lots)
    first = run(folder, out=tmp_path / "out")
    for path in sorted(folder.rglob("*"), reverse=True):
        path.unlink() if path.is_file() else path.rmdir()
    again = session.report_study(tmp_path / "out")
    assert (again.answer, again.done) == (first.answer, 12)


def test_figures_are_written_on_request(make_study, lots, run):
    # issue: "Figures also as PDF and 600 dpi TIFF on request"
    from PIL import Image

    folder = make_study(lots)
    run(folder)
    written = session.report_study(folder, figures=("pdf", "tiff")).written
    assert str(folder / "figures" / "specimens.pdf") in written
    assert (folder / "figures" / "specimens.pdf").read_bytes().startswith(b"%PDF")
    with Image.open(folder / "figures" / "specimens.tiff") as image:
        assert image.info["dpi"] == (600, 600)
    with pytest.raises(SettingsError, match=r"ends in '\.bmp'"):
        session.report_study(folder, figures=("bmp",))


def test_a_cluster_that_does_not_answer_is_refused(make_study, lots):
    # bad input
    with pytest.raises(InputError, match="Cluster 'nowhere' does not answer"):
        session.run_study(make_study(lots), cluster="nowhere", work=fake_work.measure_text)


def test_a_local_cluster_is_started_and_closed(make_study, lots):
    # the default: processes on this machine
    outcome = session.run_study(make_study(lots), workers=1, work=fake_work.measure_text)
    assert (outcome.done, outcome.exit_code) == (12, 0)


def test_tasks_follow_from_what_they_depend_on(make_study, lots):
    # a task's key changes with bytes and settings, and with nothing else
    plan = (
        '[predict]\ndark = "chitin"\nbright = "air"\n[[images]]\nfile = "images/{group}_{specimen}_{section}.txt"\n'
        '[[spectra]]\nfile = "s.csv"\nspecimen = "a0"\n'
    )
    folder = make_study({**lots, "s.csv": "400,0.1\n500,0.2\n"}, plan)

    def keys():
        tasks = list_tasks(read_plan(folder), None, folder)
        return {row.key: dict(row.tasks) for row in tasks.rows}, tasks

    before, tasks = keys()
    assert (tasks.measure, tasks.predict, tasks.compare, tasks.spectra) == (12, 12, 2, 1)
    (folder / "s.csv").write_text("400,0.1\n500,0.3\n")
    after, _ = keys()
    changed = {(unit, name) for unit in before for name in before[unit] if before[unit][name] != after[unit][name]}
    assert changed == {("s", "spectrum"), ("images_A_a0_0", "compare:s"), ("images_A_a0_1", "compare:s")}
    (folder / "STUDY.toml").write_text(plan.replace("chitin", "water"))
    swapped, _ = keys()
    assert all(swapped[u]["measure"] == after[u]["measure"] for u in after if "measure" in after[u])
    assert all(swapped[u]["predict"] != after[u]["predict"] for u in after if "predict" in after[u])


def test_material_files_of_the_study_are_part_of_what_is_hashed(make_study):
    # a changed index table must lead to a new prediction
    plan = '[predict]\ndark = "n.csv"\nbright = "air"\n[[images]]\nfile = "a.txt"\nspecimen = "1"\n'
    folder = make_study({"a.txt": "1 2", "n.csv": "400,1.5\n"}, plan)
    first = list_tasks(read_plan(folder), None, folder)
    (folder / "n.csv").write_text("400,1.6\n")
    second = list_tasks(read_plan(folder), None, folder)
    assert first.rows[0].tasks["measure"] == second.rows[0].tasks["measure"]
    assert first.rows[0].tasks["predict"] != second.rows[0].tasks["predict"]
    assert second.units[0].steps[1].settings.dark == str(folder / "n.csv")


def test_a_reference_spectrum_is_hashed_and_its_absence_is_said(make_study):
    # values against a mirror are multiplied by the mirror's own reflectance: another file that a result depends on
    plan = (
        '[[images]]\nfile = "a.txt"\nspecimen = "1"\n'
        '[[spectra]]\nfile = "s.csv"\nspecimen = "1"\nreference_file = "mirror.csv"\n'
    )
    folder = make_study({"a.txt": "1 2", "s.csv": "1", "mirror.csv": "1"}, plan)
    first = list_tasks(read_plan(folder), None, folder)
    (folder / "mirror.csv").write_text("2")
    second = list_tasks(read_plan(folder), None, folder)
    assert first.rows[1].tasks["spectrum"] != second.rows[1].tasks["spectrum"]
    (folder / "mirror.csv").unlink()
    third = list_tasks(read_plan(folder), None, folder)
    assert "'mirror.csv' is missing" in third.failures[0].reason
    assert any("reference 'mirror.csv' is missing" in text for text in session.check_study(folder).missing)


def test_two_runs_of_one_study_at_once_are_refused(make_study, lots, run):
    # single writer
    folder = make_study(lots)
    with Ledger(folder, write=True), pytest.raises(InputError, match="is being run by another process"):
        run(folder)


def test_the_ledger_keeps_settings_versions_hashes_and_attempts(make_study, lots, run):
    # issue: "holding every result, its settings, versions, hashes, times, failures with their reason"
    folder = make_study(lots)
    run(folder)
    with Ledger(folder) as ledger:
        unit = ledger.units()[0]
        task = ledger.task(unit.tasks["measure"])
        facts = ledger.facts()
    assert task.settings["page"] == 0
    assert task.versions == {"layerscan": "test"}
    assert len(task.input_sha256) == 64
    assert task.finished.endswith("+00:00")
    assert facts["plan_name"] == "STUDY.toml"
    assert len(facts["plan_sha256"]) == 64
    json.dumps(facts)
