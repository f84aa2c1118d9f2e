"""A whole study on the invented kiln: contract of the run folder, resume, repeatability."""

import json
import os
import shutil
import signal
import subprocess
import sys
import time
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

from idlearn.comparison import check_document
from idlearn.control import load_controller
from idlearn.envs.kiln import kiln_truth
from idlearn.errors import RunFolderError
from idlearn.identification import fit_fopdt
from idlearn.models import InnovationsModel, load_model
from idlearn.study import run_study, write_demo, write_report

ROOT = Path(__file__).resolve().parents[2]


@pytest.fixture(scope="session")
def kiln(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Return the folder of a finished quick run of the demo, made in another process."""
    folder = tmp_path_factory.mktemp("demo")
    done = subprocess.run(
        [sys.executable, "-m", "idlearn.cli", "demo", "kiln", "--effort", "quick"],
        cwd=folder,
        env={**os.environ, "PYTHONPATH": str(ROOT)},
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.returncode == 0, done.stderr
    assert "Verdict:" in done.stdout
    return folder / "kiln"


def document(run: Path) -> dict[str, Any]:
    held = json.loads((run / "verdict.json").read_text())
    assert isinstance(held, dict)
    return held


def timeless(verdict: dict[str, Any]) -> dict[str, Any]:
    """Return a verdict without the one figure that is a time."""
    for c in verdict["controllers"]:
        c["training"]["seconds"] = 0
    return verdict


def test_the_run_folder_keeps_its_contract(kiln: Path) -> None:
    run = kiln / "run"
    verdict = document(run)
    assert check_document(verdict) == ()
    for name in ("report.html", "manifest.json", "trials.parquet"):
        assert (run / name).stat().st_size > 0
    names = {c["name"] for c in verdict["controllers"]}
    assert {"incumbent", "pid", "lqg", "linear", "evolution", "predictive", "floor"} <= names
    assert verdict["ratio"]["low"] <= verdict["ratio"]["estimate"] <= verdict["ratio"]["high"]
    manifest = json.loads((run / "manifest.json").read_text())
    assert manifest["acceptance"]["fixed_at"] <= manifest["finished"]
    assert manifest["acceptance"]["limits"]["least_gain"] == 0.05


def test_every_file_the_verdict_names_loads(kiln: Path) -> None:
    run = kiln / "run"
    verdict = document(run)
    for c in verdict["controllers"]:
        if c["file"] is None:
            assert c["kind"] == "floor"
            continue
        controller = load_controller(run / c["file"])
        controller.reset(3)
        assert controller.act(np.tile([720.0, 720.0, 65.0], (3, 1))).shape == (3, 1)
    for m in verdict["models"]:
        assert isinstance(load_model(run / m["file"]), InnovationsModel)


def test_the_models_find_the_truth_that_was_kept_from_them(kiln: Path) -> None:
    """The kiln is invented, so its truth is known; tolerances are what the log can bear."""
    truth = kiln_truth()
    for name in ("practice-1", "jury-1"):
        model = load_model(kiln / "run" / "models" / f"{name}.npz")
        assert isinstance(model, InnovationsModel)
        found = fit_fopdt(model)
        assert found.gain == pytest.approx(truth["gain"], rel=0.1)
        assert found.time_constant_s == pytest.approx(truth["time_constant_s"], rel=0.15)
        assert found.dead_time_s == pytest.approx(truth["dead_time_s"], abs=40)


def test_trials_hold_every_episode_and_give_the_ratio(kiln: Path) -> None:
    run = kiln / "run"
    verdict = document(run)
    trials = pd.read_parquet(run / "trials.parquet")
    counts = trials.groupby("controller").size()
    assert counts.nunique() == 1
    means = trials.groupby("controller")["cost_regulation"].mean()
    ratio = means[verdict["candidate"]] / means[verdict["baseline"]]
    assert ratio == pytest.approx(verdict["ratio"]["estimate"], rel=1e-9)


def test_no_controller_beats_the_floor_notably(kiln: Path) -> None:
    """The floor knows each jury plant; the others do not."""
    verdict = document(kiln / "run")
    costs = {c["name"]: c["costs"]["regulation"] for c in verdict["controllers"]}
    for name, cost in costs.items():
        assert cost["mean"] > 0.98 * costs["floor"]["mean"], name


def test_the_report_can_be_written_again_to_the_byte(kiln: Path) -> None:
    path = kiln / "run" / "report.html"
    before = path.read_bytes()
    path.unlink()
    assert write_report(kiln / "run") == path
    assert path.read_bytes() == before
    assert b"not a safety function" in before.lower()


def test_a_run_that_lost_its_last_stages_comes_to_the_same_verdict(
    kiln: Path, tmp_path: Path
) -> None:
    work = tmp_path / "kiln"
    shutil.copytree(kiln, work)
    run = work / "run"
    before = timeless(document(run))
    for stage in ("contender-predictive", "trials-jury", "trials-stress-noise"):
        (run / "journal" / f"{stage}.json").unlink()
    (run / "verdict.json").unlink()
    finished = run_study(work / "kiln.toml", effort="quick", workers=1)
    assert timeless(finished.verdict) == before


def test_a_killed_run_goes_on_and_comes_to_the_same_verdict(kiln: Path, tmp_path: Path) -> None:
    work = tmp_path / "kiln"
    work.mkdir()
    for name in ("kiln.csv", "kiln.toml"):
        shutil.copy(kiln / name, work / name)
    command = [sys.executable, "-m", "idlearn.cli", "run", "kiln.toml", "--effort", "quick"]
    env = {**os.environ, "PYTHONPATH": str(ROOT)}
    child = subprocess.Popen(
        [*command, "--workers", "1"],
        cwd=work,
        env=env,
        stdout=subprocess.DEVNULL,
        stderr=subprocess.DEVNULL,
    )
    marks = work / "run" / "journal"
    deadline = time.monotonic() + 120
    while not (marks / "contender-pid.json").exists():
        assert child.poll() is None, "the run ended before it could be killed"
        assert time.monotonic() < deadline
        time.sleep(0.05)
    child.send_signal(signal.SIGKILL)
    child.wait()
    assert not (work / "run" / "verdict.json").exists()
    stamp = (marks / "contender-pid.json").stat().st_mtime_ns
    done = subprocess.run(
        [*command, "--workers", "2", "--json"],
        cwd=work,
        env=env,
        capture_output=True,
        text=True,
        check=True,
    )
    assert (marks / "contender-pid.json").stat().st_mtime_ns == stamp  # not made again
    resumed = timeless(json.loads(done.stdout))
    assert resumed == timeless(document(kiln / "run"))


def test_the_gate_tells_the_verdict_by_exit_code(kiln: Path) -> None:
    verdict = document(kiln / "run")["verdict"]
    done = subprocess.run(
        [sys.executable, "-m", "idlearn.cli", "run", "kiln.toml", "--effort", "quick", "--gate"],
        cwd=kiln,
        env={**os.environ, "PYTHONPATH": str(ROOT)},
        capture_output=True,
        check=False,
    )
    assert done.returncode == {"go": 0, "no-go": 10, "undecided": 11}[verdict]


def test_another_effort_is_another_study(kiln: Path) -> None:
    with pytest.raises(RunFolderError, match="effort"):
        run_study(kiln / "kiln.toml", effort="standard")


def test_the_demo_leaves_files_of_others_alone(tmp_path: Path) -> None:
    sheet = write_demo("kiln", tmp_path)
    assert write_demo("kiln", tmp_path) == sheet
    sheet.write_text("mine")
    with pytest.raises(ValueError, match="not the demo's"):
        write_demo("kiln", tmp_path)
    assert sheet.read_text() == "mine"


def test_an_interrupted_run_says_how_to_go_on(kiln: Path, tmp_path: Path) -> None:
    for name in ("kiln.csv", "kiln.toml"):
        shutil.copy(kiln / name, tmp_path / name)
    child = subprocess.Popen(
        [sys.executable, "-m", "idlearn.cli", "run", "kiln.toml", "--effort", "quick"],
        cwd=tmp_path,
        env={**os.environ, "PYTHONPATH": str(ROOT)},
        stderr=subprocess.PIPE,
        text=True,
        start_new_session=True,
    )
    mark = tmp_path / "run" / "journal" / "study.json"
    deadline = time.monotonic() + 60
    while not mark.exists():
        assert time.monotonic() < deadline
        time.sleep(0.05)
    os.killpg(child.pid, signal.SIGINT)
    _, errors = child.communicate(timeout=60)
    assert child.returncode == 130
    assert "the same command goes on where it was" in errors
    assert "Traceback" not in errors
