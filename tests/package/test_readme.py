"""What the README and the documents show works as shown."""

from __future__ import annotations

import re
import tomllib
from pathlib import Path


def blocks(path: Path, language: str) -> list[str]:
    return re.findall(rf"(?ms)^```{language}\n(.*?)^```", path.read_text(encoding="utf-8"))


def test_two_commands_do_all_set_up(checkout: Path) -> None:
    commands = [line for block in blocks(checkout / "README.md", "bash")[:2] for line in block.splitlines()]
    assert len(commands) == 2
    assert all(command.startswith("python3 -m venv ") for command in commands)
    assert commands[0].endswith("portfire demo")
    assert commands[1].endswith("pytest")


def test_ci_runs_the_test_command_of_the_readme(checkout: Path) -> None:
    script = (checkout / ".ci" / "run").read_text(encoding="utf-8")
    (pattern,) = re.findall(r"grep -m1 '(.*?)' README.md", script)
    lines = (checkout / "README.md").read_text(encoding="utf-8").splitlines()
    found = [line for line in lines if re.match(pattern, line)]
    assert len(found) == 1
    assert found[0].endswith(" && .venv-test/bin/pytest")


def test_relative_links_lead_somewhere(checkout: Path) -> None:
    pages = [*checkout.glob("*.md"), *(checkout / "docs").glob("*.md"), *(checkout / "fits").glob("*.md")]
    assert len(pages) >= 5
    missing = []
    for page in pages:
        targets = re.findall(r"\]\(([^)#:]+)(?:#[^)]*)?\)", page.read_text(encoding="utf-8"))
        missing += [f"{page.name}: {target}" for target in targets if not (page.parent / target).exists()]
    assert not missing


def test_the_job_file_of_the_readme_is_toml(checkout: Path) -> None:
    (job,) = blocks(checkout / "README.md", "toml")
    assert {"session", "out", "compare", "decode"} <= tomllib.loads(job).keys()
