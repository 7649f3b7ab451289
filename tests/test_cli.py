"""The command line: real processes for exit statuses and imports, recorded calls for what a command hands on."""

import json
import subprocess
import sys
import types
from pathlib import Path
from typing import Any

import pytest
from click.testing import CliRunner

import hedgesim
from hedgesim.cli import main
from hedgesim.errors import ExperimentError, Problem, RunError
from hedgesim.experiment.schema import json_schema

EXPERIMENT = """\
title: One call
market:
  underlyings:
    CORVANE: {spot: 100, mark_vol: 22%}
book:
  - {type: call, strike: 105, expiry: 63d, quantity: -500}
paths: {source: gbm, realised_vol: 19%, looks_per_day: 8}
schedules:
  - {every: 1h}
"""
HEAVY = ("numba", "pandas", "matplotlib", "scipy.stats")


@pytest.fixture(autouse=True)
def _in_folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    Path("x.yaml").write_text(EXPERIMENT)
    Path("bad.yaml").write_text(EXPERIMENT.replace("spot:", "spott:").replace("every: 1h", "every: 1x"))


def hedgesim_process(*arguments: str) -> subprocess.CompletedProcess[str]:
    command = [sys.executable, "-c", "from hedgesim.cli import main; main(prog_name='hedgesim')", *arguments]
    return subprocess.run(command, capture_output=True, text=True, check=False)


def test_the_version_is_that_of_the_package() -> None:
    done = hedgesim_process("--version")
    assert (done.returncode, done.stdout) == (0, f"hedgesim {hedgesim.__version__}\n")


def test_help_names_the_commands_and_the_exit_statuses() -> None:
    done = hedgesim_process("--help")
    assert done.returncode == 0
    assert [line.split()[0] for line in done.stdout.partition("Commands:\n")[2].splitlines()] == [
        "check",
        "run",
        "schema",
    ]
    assert "Exit status: 0 done, 1 the run failed, 2 the input is wrong." in done.stdout


@pytest.mark.parametrize("command", ["check", "run"])
def test_wrong_input_is_told_on_stderr_with_status_2_and_writes_nothing(command: str) -> None:
    before = sorted(Path().iterdir())
    done = hedgesim_process(command, "bad.yaml", "--set", "study.confidence=95")
    assert done.returncode == 2
    assert done.stdout == ""
    assert done.stderr.splitlines() == [
        "bad.yaml:4:15: market.underlyings.CORVANE.spott: unknown key 'spott' - did you mean 'spot'?",
        "bad.yaml:9:13: schedules.0.every: unknown unit 'x' in '1x' - write a number with min, h, d, w or y, such as "
        "30min or 5d; a bare number or 20/52 is years",
        "--set study.confidence: 95 looks like a percentage - write 95%",
    ]
    assert sorted(Path().iterdir()) == before


@pytest.mark.parametrize(
    ("arguments", "told"),
    [
        (
            ("check", "nowhere.yaml"),
            "nowhere.yaml: cannot be read (no such file or directory) - name an experiment file",
        ),
        (("check",), "Missing argument 'FILE'"),
        (("chek", "x.yaml"), "No such command 'chek'"),
        (("run", "x.yaml", "--threads", "0"), "Invalid value for '--threads'"),
        (("run", "x.yaml", "--ledgr"), "No such option"),
    ],
)
def test_a_wrong_command_line_has_status_2(arguments: tuple[str, ...], told: str) -> None:
    done = hedgesim_process(*arguments)
    assert done.returncode == 2
    assert told in done.stderr


def test_schema_prints_the_json_schema() -> None:
    done = hedgesim_process("schema")
    assert done.returncode == 0
    assert json.loads(done.stdout) == json_schema()
    assert set(json.loads(done.stdout)["required"]) == {"title", "market", "book", "paths", "schedules"}


@pytest.mark.parametrize(
    "arguments",
    [
        ("--help",),
        ("run", "--help"),
        ("schema",),
        ("check", "bad.yaml"),
        ("check", "x.yaml"),
    ],
)
def test_light_commands_load_no_heavy_module(arguments: tuple[str, ...]) -> None:
    script = (
        "import sys\n"
        "from hedgesim.cli import main\n"
        "try:\n    main(sys.argv[1:])\n"
        "except SystemExit as done:\n    status = done.code or 0\n"
        f"print('status', status, [name for name in {HEAVY} if name in sys.modules])\n"
    )
    done = subprocess.run([sys.executable, "-c", script, *arguments], capture_output=True, text=True, check=False)
    status = 2 if "bad.yaml" in arguments else 0
    assert done.stdout.splitlines()[-1:] == [f"status {status} []"], done.stderr


@pytest.fixture
def rooms(monkeypatch: pytest.MonkeyPatch) -> dict[str, Any]:
    """Stand-ins for the rooms that resolve and run, which record how they are called."""
    seen: dict[str, Any] = {"raises": None}

    def run_file(path: Path, **options: Any) -> Path:
        seen["run"] = (path, options)
        if seen["raises"] is not None:
            raise seen["raises"]
        return options["out"] or Path("reports") / path.stem

    def describe(loaded: Any) -> list[str]:
        seen["describe"] = loaded
        return ["forward 100", "net delta -120"]

    for name, function in (("run", run_file), ("resolve", describe)):
        module = types.ModuleType(f"hedgesim.experiment.{name}")
        setattr(module, function.__name__, function)
        monkeypatch.setitem(sys.modules, module.__name__, module)
    return seen


def test_run_hands_on_every_option_and_prints_the_folder(rooms: dict[str, Any]) -> None:
    arguments = "run x.yaml --out o --overwrite --threads 2 --set paths.seed=0 --set paths.count=9 --ledger --quiet"
    result = CliRunner().invoke(main, arguments.split())
    assert (result.exit_code, result.stdout) == (0, "o\n")
    assert rooms["run"] == (
        Path("x.yaml"),
        {
            "out": Path("o"), "overwrite": True, "threads": 2, "overrides": ("paths.seed=0", "paths.count=9"),
            "ledger": True, "quiet": True,
        },
    )  # fmt: skip


def test_run_without_options_leaves_the_choices_to_the_run(rooms: dict[str, Any]) -> None:
    result = CliRunner().invoke(main, ["run", "x.yaml"])
    assert (result.exit_code, result.stdout) == (0, f"{Path('reports') / 'x'}\n")
    assert rooms["run"][1] == {
        "out": None, "overwrite": False, "threads": None, "overrides": (), "ledger": False, "quiet": False,
    }  # fmt: skip


@pytest.mark.parametrize(
    ("raised", "status", "told"),
    [
        (RunError("reports/x holds another experiment - give --overwrite"), 1, None),
        (KeyboardInterrupt(), 1, "stopped, nothing written"),
        (
            ExperimentError([Problem("x.yaml", 3, 1, "book", "too long", "shorten it")]),
            2,
            "x.yaml:3:1: book: too long - shorten it",
        ),
    ],
)
def test_a_run_that_fails_says_why(rooms: dict[str, Any], raised: BaseException, status: int, told: str | None) -> None:
    rooms["raises"] = raised
    result = CliRunner().invoke(main, ["run", "x.yaml"])
    assert (result.exit_code, result.stdout) == (status, "")
    assert result.stderr == f"{told or raised}\n"


def test_check_prints_what_would_be_run(rooms: dict[str, Any]) -> None:
    result = CliRunner().invoke(main, ["check", "x.yaml", "--set", "paths.seed=0"])
    assert (result.exit_code, result.stdout) == (0, "forward 100\nnet delta -120\n")
    assert rooms["describe"].experiment.paths.seed == 0
    assert rooms["describe"].path == Path("x.yaml")
