"""The five commands: how they find Python and make their environment."""

import os
import shutil
import subprocess
from pathlib import Path

import pytest

CHECKOUT = Path(__file__).parents[2]
COMMANDS = ("bench", "check", "demo", "format", "test")


def place(folder: Path, programs: dict[str, str]) -> dict[str, str]:
    """Lay out a checkout with the shared part only, and a PATH with nothing but `programs` and what the shell needs."""
    (folder / "scripts").mkdir()
    (folder / "bin").mkdir()
    shutil.copy(CHECKOUT / "scripts/_environment.sh", folder / "scripts")
    (folder / "pyproject.toml").write_text("[project]\n")
    for name in ("bash", "dirname", "cksum", "grep", "mkdir", "cat", "chmod"):
        (folder / "bin" / name).symlink_to(shutil.which(name))
    for name, text in programs.items():
        program = folder / "bin" / name
        program.write_text(f"#!{shutil.which('bash')}\n{text}")
        program.chmod(0o755)
    return {"PATH": str(folder / "bin"), "HOME": str(folder)}


def run(folder: Path, environment: dict[str, str], extras: str) -> subprocess.CompletedProcess[str]:
    script = f'set -euo pipefail; . {folder}/scripts/_environment.sh; environment "{extras}"; echo ready'
    return subprocess.run(["bash", "-c", script], env=environment, capture_output=True, text=True, cwd="/", check=False)


# An interpreter as far as the shared part asks: its version is judged, venv and pip are noted down instead of done.
NEW_PYTHON = """
echo "$*" >> "$HOME/asked"
case "$*" in
  "-m venv --clear .venv")
    mkdir -p .venv/bin
    for made in python bigsvd; do cat "$0" > .venv/bin/$made; chmod +x .venv/bin/$made; done ;;
esac
"""
OLD_PYTHON = 'case "$1" in --version) echo "Python 3.9.2" ;; *) exit 1 ;; esac'


@pytest.mark.parametrize("name", COMMANDS)
def test_commands_can_be_run_and_stop_at_the_first_failure(name):
    path = CHECKOUT / "scripts" / name
    assert os.access(path, os.X_OK)
    assert "set -euo pipefail" in path.read_text()


def test_there_are_five_commands_and_the_storm_and_ci_runs_the_same_test():
    programs = {path.name for path in (CHECKOUT / "scripts").iterdir() if path.is_file() and os.access(path, os.X_OK)}
    # Beside the five stands the kill storm, which is no part of a day.
    assert programs == {*COMMANDS, "kill-storm"}
    assert "scripts/test" in (CHECKOUT / ".ci/run").read_text()


def test_python_too_old_is_named_with_the_version_wanted(tmp_path):
    done = run(tmp_path, place(tmp_path, {"python3": OLD_PYTHON}), "")
    assert done.returncode != 0
    assert "needs Python 3.11 or newer; python3 on the PATH is: Python 3.9.2" in done.stderr
    assert "ready" not in done.stdout


def test_newer_python_under_another_name_is_found(tmp_path):
    done = run(tmp_path, place(tmp_path, {"python3": OLD_PYTHON, "python3.12": NEW_PYTHON}), "")
    assert done.stdout == "ready\n", done.stderr


def test_installs_once_and_again_when_pyproject_or_extras_change(tmp_path):
    environment = place(tmp_path, {"python3": NEW_PYTHON})

    def installs() -> int:
        return (tmp_path / "asked").read_text().count("pip install")

    for extras, expected in (("", 1), ("", 1), ("[test,check]", 2), ("", 2), ("[test,check]", 2)):
        assert run(tmp_path, environment, extras).stdout == "ready\n"
        assert installs() == expected
    (tmp_path / "pyproject.toml").write_text("[project]\nname = 'other'\n")
    assert run(tmp_path, environment, "[test,check]").stdout == "ready\n"
    assert installs() == 3


def test_venv_without_pip_gets_it_from_the_systems_own(tmp_path):
    no_ensurepip = NEW_PYTHON.replace(
        '"-m venv --clear .venv")', '"-m venv --clear .venv") exit 1 ;;\n  *--without-pip*)'
    )
    done = run(tmp_path, place(tmp_path, {"python3": no_ensurepip}), "")
    assert done.stdout == "ready\n", done.stderr
    assert "-m pip --python .venv/bin/python install -q pip" in (tmp_path / "asked").read_text()
