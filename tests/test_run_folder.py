"""The folder of a run: whose results it may replace, and what a run that fails or is stopped leaves behind."""

import os
import re
import shutil
import signal
import subprocess
import sys
from pathlib import Path

import pytest
from click.testing import CliRunner

from hedgesim.cli import main
from hedgesim.experiment.folder import replaced_at_once

EXPERIMENT = """\
title: One call
market: {underlyings: {CORVANE: {spot: 100, mark_vol: 22%}}}
book:
  - {type: call, strike: 105, expiry: 21d, quantity: -500}
paths: {source: gbm, realised_vol: 19%, looks_per_day: 4, count: 1000}
schedules: [{every: 1d}, {every: 7d}]
"""
# A test runner in the background may hand on Ctrl-C as ignored.
PROCESS = (
    "import signal; signal.signal(signal.SIGINT, signal.default_int_handler)\n"
    "from hedgesim.cli import main; main(prog_name='hedgesim')"
)


def run(*arguments: str):
    return CliRunner().invoke(main, ["run", "x.yaml", "--quiet", *arguments])


def contents(folder: Path) -> dict[str, bytes | None]:
    """Every file and folder below, hidden ones included, with the bytes of the files."""
    return {
        str(path.relative_to(folder)): path.read_bytes() if path.is_file() else None
        for path in sorted(folder.rglob("*"))
    }


@pytest.fixture(scope="module")
def finished(tmp_path_factory) -> Path:
    folder = tmp_path_factory.mktemp("finished")
    (folder / "x.yaml").write_text(EXPERIMENT)
    done = CliRunner().invoke(main, ["run", str(folder / "x.yaml"), "--quiet", "--out", str(folder / "o")])
    assert (done.exit_code, done.stderr) == (0, "")
    return folder / "o"


@pytest.fixture(autouse=True)
def here(tmp_path, monkeypatch) -> Path:
    monkeypatch.chdir(tmp_path)
    Path("x.yaml").write_text(EXPERIMENT)
    return tmp_path


@pytest.fixture
def results(here, finished) -> Path:
    shutil.copytree(finished, here / "reports" / "x")
    return Path("reports/x")


def test_results_of_another_experiment_are_refused(results, here):
    before = contents(here)
    done = run("--set", "paths.seed=2")
    assert done.exit_code == 2
    assert done.stdout == ""
    assert re.fullmatch(
        r"reports/x: holds the results of another experiment \('One call', [0-9a-f]{12}\) - "
        r"add --overwrite to replace them, or name another folder with --out\n",
        done.stderr,
    )
    assert contents(here) == before


def test_results_of_another_experiment_are_replaced_on_request(results, here):
    before = contents(results)
    done = run("--set", "paths.seed=2", "--overwrite")
    assert (done.exit_code, done.stdout, done.stderr) == (0, "reports/x\n", "")
    after = contents(results)
    assert set(after) == set(before)
    assert after["schedules.csv"] != before["schedules.csv"]
    assert sorted(path.name for path in (here / "reports").iterdir()) == ["x"]


def test_results_of_the_same_experiment_are_replaced_without_asking(results, here):
    (results / "report.pdf").write_bytes(b"spoilt")
    done = run("--ledger")
    assert (done.exit_code, done.stderr) == (0, "")
    assert (results / "report.pdf").read_bytes().startswith(b"%PDF-")
    assert {path.name for path in results.glob("ledger.*")} < {"ledger.npz", "ledger.parquet"}
    # The ledger of an earlier run does not outlive it.
    assert run().exit_code == 0
    assert not list(results.glob("ledger.*"))
    assert sorted(path.name for path in (here / "reports").iterdir()) == ["x"]


@pytest.mark.parametrize("content", ["not ours", '{"hashes": {}}', '{"hashes": []}', "[1]"])
@pytest.mark.parametrize("overwrite", [(), ("--overwrite",)])
def test_a_folder_with_other_files_is_refused_in_any_case(here, content, overwrite):
    Path("o").mkdir()
    Path("o/findings.json").write_text(content)
    before = contents(here)
    done = run("--out", "o", *overwrite)
    assert done.exit_code == 2
    assert done.stderr == "o: holds files that are not results of a run - name another with --out\n"
    assert contents(here) == before


@pytest.mark.parametrize("overwrite", [(), ("--overwrite",)])
def test_a_file_put_among_results_is_never_lost(results, here, overwrite):
    (results / "notes from the meeting.txt").write_text("run it daily")
    before = contents(here)
    done = run(*overwrite)
    assert done.exit_code == 2
    assert done.stderr == (
        "reports/x: holds 'notes from the meeting.txt', which no run wrote and would be lost - "
        "move it, or name another with --out\n"
    )
    assert contents(here) == before


def test_a_file_in_the_way_is_refused(here):
    Path("o").write_text("a file")
    done = run("--out", "o", "--overwrite")
    assert (done.exit_code, done.stderr) == (2, "o: is not a folder - name another with --out\n")
    assert Path("o").read_text() == "a file"


def test_an_empty_folder_is_used():
    Path("o").mkdir()
    assert run("--out", "o").exit_code == 0
    assert Path("o/schedules.csv").is_file()


def test_a_place_that_cannot_be_written_fails_before_the_work(here):
    before = contents(here)
    # A count whose run would not end within the test: it must not start.
    done = run("--out", "x.yaml/deep/o", "--set", "paths.count=9999999999")
    assert done.exit_code == 1
    assert done.stderr == f"x.yaml/deep/o: cannot be written ({here / 'x.yaml'} is not a folder)\n"
    assert contents(here) == before


@pytest.mark.skipif(os.geteuid() == 0, reason="root may write anywhere")
def test_a_parent_without_permission_fails_before_the_work(here):
    Path("locked").mkdir(mode=0o555)
    done = run("--out", "locked/o", "--set", "paths.count=9999999999")
    assert done.exit_code == 1
    assert done.stderr == f"locked/o: cannot be written ({here / 'locked'} may not be written to)\n"


@pytest.mark.parametrize(
    ("raised", "told"), [(RuntimeError("torn"), ""), (OSError(28, "No space left on device"), None)]
)
def test_a_report_that_fails_leaves_nothing(here, monkeypatch, raised, told):
    def fail(*arguments, **options):
        raise raised

    monkeypatch.setattr("hedgesim.report.pack.write_report", fail)
    before = contents(here)
    done = run("--out", "new/deep/o")
    assert done.exit_code == 1
    assert contents(here) == before
    assert done.stderr == ("new/deep/o: cannot be written (no space left on device)\n" if told is None else told)


def test_a_report_that_fails_leaves_the_old_results(results, here, monkeypatch):
    def fail(*arguments, **options):
        raise RuntimeError("torn")

    monkeypatch.setattr("hedgesim.report.pack.write_report", fail)
    before = contents(here)
    assert run("--set", "paths.seed=2", "--overwrite").exit_code == 1
    assert contents(here) == before


@pytest.mark.parametrize("interrupted", [1, 2])
def test_an_interruption_of_the_exchange_leaves_the_old_results(results, monkeypatch, interrupted):
    """The first renaming sets the old folder aside, the second puts the new one in its place."""
    before, rename, done = contents(results), Path.rename, []

    def stopped(self, target):
        done.append(target)
        if len(done) == interrupted:
            raise KeyboardInterrupt
        return rename(self, target)

    monkeypatch.setattr(Path, "rename", stopped)
    with pytest.raises(KeyboardInterrupt), replaced_at_once(results) as fresh:
        (fresh / "findings.json").write_text("{}")
    assert contents(results) == before
    assert sorted(path.name for path in results.parent.iterdir()) == ["x"]


@pytest.mark.parametrize("sent", [signal.SIGINT, signal.SIGTERM])
def test_a_run_stopped_amid_its_paths_leaves_nothing(here, sent):
    before = contents(here)
    # More paths than any machine runs within the test; the first line of progress says that they have begun.
    command = [sys.executable, "-c", PROCESS, "run", "x.yaml", "--set", "paths.count=20000000"]
    with subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True) as process:
        first = process.stderr.readline()
        if first.startswith("compiling"):
            first = process.stderr.readline()
        process.send_signal(sent)
        out, rest = process.communicate(timeout=60)
    assert first.startswith("paths: 10 %")
    assert process.returncode == 1
    assert out == ""
    assert rest.splitlines()[-1] == "stopped, nothing written"
    assert contents(here) == before


@pytest.mark.parametrize("sent", [signal.SIGINT, signal.SIGTERM])
def test_a_run_stopped_while_writing_leaves_the_old_results(results, here, sent):
    before = contents(here)
    slow = (
        "import time, hedgesim.report.pack as pack\n"
        "def write_report(*arguments, **options):\n"
        "    print('writing', flush=True)\n"
        "    time.sleep(600)\n"
        "pack.write_report = write_report\n"
    )
    command = [sys.executable, "-c", slow + PROCESS, "run", "x.yaml", "--quiet", "--overwrite"]
    with subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True) as process:
        assert process.stdout.readline() == "writing\n"
        # The tables are there already, in a folder of another name.
        assert len(list((here / "reports").glob(".x.*/schedules.csv"))) == 1
        process.send_signal(sent)
        out, told = process.communicate(timeout=60)
    assert (process.returncode, out, told) == (1, "", "stopped, nothing written\n")
    assert contents(here) == before
