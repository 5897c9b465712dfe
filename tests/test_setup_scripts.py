"""The scripts that take a fresh machine to a running charflow, against systems made of stand-in programs."""

from __future__ import annotations

import shutil
import subprocess
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parent.parent
SCRIPTS = ("decks/demo.sh", "decks/setup.sh", "tests/run.sh", ".ci/run")
NEEDED = ("python3", "python3-venv", "ngspice", "libngspice0", "ca-certificates")

# What any Linux has; Python, ngspice and package managers are left out on purpose.
PLAIN_PROGRAMS = (
    "bash",
    "cat",
    "chmod",
    "cp",
    "dirname",
    "env",
    "grep",
    "mkdir",
    "mktemp",
    "rm",
    "sha256sum",
)

# apt-get that writes down what it is asked, and "installs" by making a program of the package's name.
APT_GET = """\
echo "apt-get $*" >> "$LOG"
[[ " $* " == *" install "* ]] || exit 0
for name; do
  case $name in
    alpha | beta) printf '#!/bin/sh\\n' > "$BIN/$name"; chmod +x "$BIN/$name" ;;
    unfit) ;;
    absent) echo "E: Unable to locate package $name" >&2; exit 100 ;;
  esac
done
"""

# python3 that passes every check it is asked, makes environments of itself, and writes down pip's work.
PYTHON = """\
case "$1 $2" in
  "-m venv")
    echo "python $*" >> "$LOG"
    [[ $3 != --clear ]] || rm -rf "${*: -1}"
    mkdir -p "${*: -1}/bin"; cp "$0" "${*: -1}/bin/python"
    ;;
  "-m pip") echo "pip ${*: -1}" >> "$LOG" ;;
  *print*) echo 3 11 ;;
  *", pip;"*) exit 1 ;;
esac
"""


class System:
    """A PATH of stand-ins, and the log they write."""

    def __init__(self, folder: Path) -> None:
        self.bin = folder / "bin"
        self.log = folder / "log"
        self.bin.mkdir()
        for name in PLAIN_PROGRAMS:
            (self.bin / name).symlink_to(str(shutil.which(name)))

    def add(self, name: str, body: str) -> None:
        program = self.bin / name
        program.write_text(f"#!{self.bin}/bash\n{body}")
        program.chmod(0o755)

    def run(self, *command: str | Path, cwd: Path = ROOT) -> subprocess.CompletedProcess[str]:
        return subprocess.run(
            [self.bin / "bash", *command],
            env={"PATH": str(self.bin), "BIN": str(self.bin), "LOG": str(self.log)},
            cwd=cwd,
            stdin=subprocess.DEVNULL,
            capture_output=True,
            text=True,
            timeout=60,
            check=False,
        )

    def setup(self, command: str, root: Path = ROOT) -> subprocess.CompletedProcess[str]:
        """Run one shell command with the functions of decks/setup.sh."""
        return self.run("-c", f'set -euo pipefail; source "{root}/decks/setup.sh"; {command}')

    @property
    def calls(self) -> list[str]:
        """What the stand-ins were asked, in order."""
        return self.log.read_text().splitlines() if self.log.exists() else []

    @property
    def verbs(self) -> list[str]:
        """Which of its jobs apt-get was asked to do."""
        return [word for call in self.calls for word in call.split() if word in ("update", "install")]


@pytest.fixture
def system(tmp_path: Path) -> System:
    """A Linux without Python, ngspice or a known package manager."""
    return System(tmp_path)


@pytest.fixture
def debian(system: System) -> System:
    """The same with apt-get, sudo and package lists that know all but ``absent``."""
    system.add("apt-get", APT_GET)
    system.add("apt-cache", '[[ "$2" != absent ]]')
    system.add("sudo", '"$@"')
    return system


@pytest.fixture
def clone(tmp_path: Path) -> Path:
    """The least of a clone that can be set up, in a folder whose name has a space."""
    folder = tmp_path / "my clone"
    (folder / "decks").mkdir(parents=True)
    shutil.copy(ROOT / "decks" / "setup.sh", folder / "decks")
    (folder / "pyproject.toml").write_text("[project]\n")
    return folder


@pytest.mark.parametrize("script", SCRIPTS)
def test_bash_can_read_the_script(script: str) -> None:
    done = subprocess.run(["bash", "-n", ROOT / script], capture_output=True, text=True, check=False)
    assert (done.returncode, done.stderr) == (0, "")


@pytest.mark.parametrize("script", [script for script in SCRIPTS if script != "decks/setup.sh"])
def test_what_is_run_directly_is_executable(script: str) -> None:
    assert (ROOT / script).stat().st_mode & 0o111


@pytest.mark.skipif(not shutil.which("shellcheck"), reason="shellcheck is not installed")
def test_shellcheck_has_no_complaint() -> None:
    done = subprocess.run(
        ["shellcheck", "-x", *SCRIPTS], cwd=ROOT, capture_output=True, text=True, check=False
    )
    assert done.stdout == ""


@pytest.mark.parametrize("script", ["decks/demo.sh", "tests/run.sh", ".ci/run"])
def test_an_unknown_system_is_told_what_to_install_and_left_alone(
    script: str, system: System, tmp_path: Path
) -> None:
    for manager in ("apk", "brew", "dnf", "pacman", "pip", "sudo", "yum", "zypper"):
        system.add(manager, f'echo "{manager} $*" >> "$LOG"')
    done = system.run(ROOT / script, cwd=tmp_path)
    assert done.returncode == 3
    assert "install" in done.stderr
    assert "Python 3.11 or newer, as python3 (Debian and Ubuntu: python3)" in done.stderr
    assert "the ngspice program (Debian and Ubuntu: ngspice)" in done.stderr
    assert done.stdout == ""
    assert system.calls == []


@pytest.mark.parametrize("name", NEEDED)
def test_each_needed_package_is_described_in_words(name: str, system: System) -> None:
    words = system.setup(f"describe {name}").stdout.strip()
    assert words
    assert words != f"the program {name}"


def test_without_root_or_sudo_it_says_so(system: System) -> None:
    system.add("apt-get", APT_GET)
    done = system.setup("is_root() { false; }; want_packages required alpha")
    assert done.returncode == 3
    assert "no sudo" in done.stderr
    assert "alpha" in done.stderr
    assert system.calls == []


def test_what_is_missing_is_installed_in_one_go(debian: System) -> None:
    debian.add("beta", "")
    done = debian.setup("want_packages required alpha beta && type -P alpha")
    assert done.returncode == 0, done.stderr
    assert debian.verbs == ["update", "install"]
    assert "alpha" in debian.calls[1]
    assert "beta" not in debian.calls[1]


@pytest.mark.parametrize("need", ["required", "optional"])
def test_the_package_manager_is_not_asked_when_nothing_is_missing(need: str, debian: System) -> None:
    debian.add("alpha", "")
    assert debian.setup(f"want_packages {need} alpha").returncode == 0
    assert debian.calls == []


def test_a_required_package_that_cannot_be_installed_ends_the_script_with_the_reason(debian: System) -> None:
    done = debian.setup("want_packages required absent; echo reached")
    assert done.returncode == 3
    assert "Unable to locate package absent" in done.stderr
    assert "reached" not in done.stdout


def test_a_required_package_that_does_not_bring_what_is_needed_ends_the_script(debian: System) -> None:
    done = debian.setup("want_packages required unfit; echo reached")
    assert done.returncode == 3
    assert "the program unfit" in done.stderr
    assert "reached" not in done.stdout


def test_an_optional_package_that_cannot_be_had_is_named_and_the_others_are_installed(debian: System) -> None:
    done = debian.setup("want_packages optional absent alpha; type -P alpha")
    assert done.returncode == 0, done.stderr
    assert "going on without absent" in done.stderr
    assert debian.verbs.count("install") == 1


def test_an_optional_package_is_forgone_on_an_unknown_system(system: System) -> None:
    done = system.setup("want_packages optional alpha; echo reached")
    assert done.returncode == 0
    assert "Going on without alpha" in done.stderr
    assert done.stdout == "reached\n"


def test_an_old_python_first_on_path_does_not_hide_a_new_one(system: System) -> None:
    system.add("python3", "exit 1")
    assert system.setup("have python3").returncode == 1
    system.add("python3.12", "")
    assert system.setup("find_python").stdout == f"{system.bin}/python3.12\n"


class TestVirtualEnvironment:
    """Installed once, and again only when something it depends on changed."""

    @pytest.fixture
    def ready(self, system: System) -> System:
        system.add("python3", PYTHON)
        return system

    def set_up(self, system: System, clone: Path, wanted: str = "charflow") -> list[str]:
        """Set up and return what that made the stand-ins do."""
        before = len(system.calls)
        done = system.setup(f"want_packages() {{ true; }}; set_up '{wanted}'", root=clone)
        assert done.returncode == 0, done.stderr
        return system.calls[before:]

    def test_the_first_run_makes_it_and_the_second_does_nothing(self, ready: System, clone: Path) -> None:
        venv, pip = self.set_up(ready, clone)
        assert venv == f"python -m venv {clone}/.venv"
        assert pip == f"pip {clone}"
        assert self.set_up(ready, clone) == []

    def test_a_changed_pyproject_is_installed_again(self, ready: System, clone: Path) -> None:
        self.set_up(ready, clone)
        (clone / "pyproject.toml").write_text('[project]\nname = "charflow"\n')
        assert self.set_up(ready, clone) == [f"pip {clone}"]

    def test_what_the_tests_need_is_added_and_serves_the_demo_too(self, ready: System, clone: Path) -> None:
        self.set_up(ready, clone)
        assert self.set_up(ready, clone, "charflow[test]") == [f"pip {clone}[test]"]
        assert self.set_up(ready, clone) == []

    def test_a_moved_clone_gets_a_new_one(self, ready: System, clone: Path) -> None:
        self.set_up(ready, clone)
        moved = clone.rename(clone.with_name("moved"))
        venv, _ = self.set_up(ready, moved)
        assert venv == f"python -m venv --clear {moved}/.venv"

    def test_a_failed_installation_is_not_taken_for_a_finished_one(self, ready: System, clone: Path) -> None:
        ready.add("python3", PYTHON.replace('"-m pip")', '"-m pip") echo "no route"; exit 1;;\n"-m no")'))
        done = ready.setup("want_packages() { true; }; set_up charflow", root=clone)
        assert done.returncode == 3
        assert "no route" in done.stderr
        ready.add("python3", PYTHON)
        shutil.copy(ready.bin / "python3", clone / ".venv" / "bin" / "python")
        assert self.set_up(ready, clone) == [f"pip {clone}"]

    def test_somebody_elses_environment_is_used_and_never_cleared(self, ready: System, clone: Path) -> None:
        folder = clone / ".venv" / "bin"
        folder.mkdir(parents=True)
        ready.add("python3", PYTHON.replace("exit 1", "exit 0"))
        shutil.copy(ready.bin / "python3", folder / "python")
        assert self.set_up(ready, clone) == [f"pip {clone}"]
        assert self.set_up(ready, clone) == []

    def test_outside_a_clone_it_names_the_installed_command(self, ready: System, clone: Path) -> None:
        (clone / "pyproject.toml").unlink()
        done = ready.setup("set_up charflow", root=clone)
        assert done.returncode == 3
        assert "charflow demo" in done.stderr
