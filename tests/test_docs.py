"""What the documents show is what the program says; `python tests/test_docs.py` writes it anew."""

import contextlib
import io
import re
import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).parent.parent
README = ROOT / "README.md"
SHOWN = re.compile(r"```\n(\$ (?P<command>[^\n]+)\n)(?P<output>.*?)```", re.DOTALL)


def hedgesim(*arguments: str, cwd: Path) -> str:
    """What the command prints, both streams, the progress lines left out."""
    start = [sys.executable, "-c", "from hedgesim.cli import main; main()"]
    done = subprocess.run([*start, *arguments], cwd=cwd, capture_output=True, text=True, check=False)
    return "\n".join(
        line for line in (done.stdout + done.stderr).splitlines() if not line.startswith(("paths: ", "compiling"))
    )


def blocks(language: str) -> list[str]:
    return re.findall(rf"```{language}\n(.*?)```", README.read_text(), re.DOTALL)


def produced(command: str, folder: Path) -> str:
    """Run a command that the README shows."""
    if command == "hedgesim check slips.yaml":
        (folder / "slips.yaml").write_text(blocks("yaml")[0])
        return hedgesim("check", "slips.yaml", cwd=folder)
    if command == "hedgesim run configs/demo.yaml":
        text = hedgesim("run", "configs/demo.yaml", "--out", str(folder / "demo"), cwd=ROOT)
        return text.replace(str(folder / "demo"), "reports/demo")
    if command == "python example.py":
        printed = io.StringIO()
        with contextlib.redirect_stdout(printed), contextlib.chdir(ROOT):
            exec(compile(blocks("python")[0], "example.py", "exec"), {})
        return printed.getvalue()
    raise AssertionError(f"nothing is known of the command {command!r}")


def commands() -> list[str]:
    return [match["command"] for match in SHOWN.finditer(README.read_text())]


@pytest.mark.parametrize("command", commands())
def test_the_readme_shows_what_the_command_prints(command, tmp_path):
    shown = {m["command"]: m["output"] for m in SHOWN.finditer(README.read_text())}[command]
    assert shown.rstrip() == produced(command, tmp_path).rstrip()


def test_the_readme_has_a_run_a_check_and_a_python_example():
    assert len(commands()) == 3


def test_every_experiment_named_in_the_readme_exists_and_none_is_left_out():
    named = set(re.findall(r"^\| `([a-z_]+\.yaml)`", README.read_text(), re.MULTILINE)) - {"experiment.yaml"}
    assert named == {path.name for path in (ROOT / "configs").glob("*.yaml")}


def test_every_key_of_the_schema_is_in_the_readme():
    from hedgesim.experiment.schema import json_schema

    text = README.read_text()
    schema = json_schema()
    keys = set(schema["properties"])
    for definition in schema["$defs"].values():
        keys |= set(definition.get("properties", {}))
    assert {key for key in keys if f"`{key}`" not in text and f"{key}:" not in text} <= {
        "column",
        "unit",
        "price",
        "type",
    }


def test_links_in_the_documents_lead_somewhere():
    for document in (README, ROOT / "DEVELOPERS.md", ROOT / "reports" / "README.md"):
        for target in re.findall(r"\]\(([^)#]+)\)", document.read_text()):
            assert (document.parent / target).exists(), f"{document.name}: {target}"


def main() -> None:
    """Write the outputs into the README."""
    import tempfile

    def renewed(match: re.Match[str]) -> str:
        with tempfile.TemporaryDirectory() as folder:
            return f"```\n{match[1]}{produced(match['command'], Path(folder)).rstrip()}\n```"

    README.write_text(SHOWN.sub(renewed, README.read_text()))


if __name__ == "__main__":
    main()
