"""Help: every command explains itself with an example, at once."""

from __future__ import annotations

import resource
import subprocess
import sys

import pytest
from cli_samples import run

COMMANDS = ("inspect", "plan", "decompose", "verify", "demo")
# What the issue asks of the shared options, and of decompose alone.
SHARED = [
    "--matrix",
    "--rank",
    "--variance",
    "--max-rank",
    "--samples",
    "--center",
    "--scale",
    "--tolerance",
    "--strict",
    "--max-sweeps",
    "--memory",
    "--workers",
    "--precision",
    "--route",
    "--axis",
    "--seed",
    "--quiet",
    "--json",
]


@pytest.mark.parametrize("name", COMMANDS)
def test_help_says_what_a_command_does_and_gives_an_example(name: str) -> None:
    ended = run(name, "--help")
    assert ended.exit_code == 0
    assert "Example" in ended.output
    assert f"    bigsvd {name} " in ended.output
    assert "--json" in ended.output


@pytest.mark.parametrize(
    ("name", "options"),
    [
        ("plan", SHARED),
        ("decompose", [*SHARED, "--out", "--scratch", "--overwrite", "--start-over", "--save-every", "--finish-by"]),
    ],
)
def test_every_option_is_offered_and_explained(name: str, options: list[str]) -> None:
    lines = run(name, "--help").output.splitlines()
    for option in options:
        at = next(
            number
            for number, line in enumerate(lines)
            if line.strip().startswith(f"{option} ") or line.strip() == option
        )
        assert len(lines[at].split("  ")) > 1 or lines[at + 1].startswith("      "), f"{option} has no words"


def test_exit_statuses_are_in_the_help() -> None:
    for words in (("--help",), ("decompose", "--help")):
        text = run(*words).output
        assert "Exit status:" in text
        for status in ("    0    ", "    2    ", "    3    ", "    1    ", "    130, 143    "):
            assert status in text
    assert "    3    does not agree" in run("verify", "--help").output


def test_decompose_says_what_results_are_not_for() -> None:
    words = " ".join(run("decompose", "--help").output.split())
    assert "For clinical or safety use follow your local rules" in words


def test_help_lines_fit_eighty_columns() -> None:
    for name in COMMANDS:
        # An example may not be broken: it is to be copied.
        lines = [line for line in run(name, "--help").output.splitlines() if not line.startswith("    bigsvd ")]
        assert max(map(len, lines)) <= 80


def test_help_takes_less_than_four_tenths_of_a_second() -> None:
    taken = []
    for _ in range(3):
        before = resource.getrusage(resource.RUSAGE_CHILDREN)
        subprocess.run([sys.executable, "-m", "bigsvd", "--help"], capture_output=True, check=True)
        after = resource.getrusage(resource.RUSAGE_CHILDREN)
        taken.append(after.ru_utime + after.ru_stime - before.ru_utime - before.ru_stime)
    assert min(taken) <= 0.4


def test_version_is_printed() -> None:
    assert run("--version").output.startswith("bigsvd 0.")


def test_no_command_at_all_is_wrong_usage() -> None:
    assert run().exit_code == 2
