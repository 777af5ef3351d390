"""The shell scripts: sound by the shell and by the linter, idempotent, and careful with what is not theirs."""

import os
import shutil
import stat
import subprocess
import sys
from pathlib import Path

import pytest

CLONE = Path(__file__).parents[2]
SCRIPTS = [*sorted((CLONE / "deploy").glob("*.sh")), CLONE / "tests" / "run.sh"]


def shell(*words: str | Path, **environment: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        ["sh", *map(str, words)],
        capture_output=True,
        text=True,
        timeout=60,
        check=False,
        env={**os.environ, **environment},
    )


def install(root: Path, *options: str) -> subprocess.CompletedProcess[str]:
    return shell(CLONE / "deploy" / "install.sh", "--root", root, "--files-only", *options)


def contents(root: Path) -> dict[str, tuple[int, bytes]]:
    return {
        str(path.relative_to(root)): (path.stat().st_mode, path.read_bytes())
        for path in sorted(root.rglob("*"))
        if path.is_file()
    }


@pytest.mark.parametrize("script", SCRIPTS, ids=lambda script: script.name)
def test_a_script_is_plain_posix_shell(script):
    assert shell("-n", script).stderr == ""


@pytest.mark.parametrize("script", [*SCRIPTS, CLONE / ".ci" / "run"], ids=lambda script: script.name)
def test_the_linter_finds_nothing_in_a_script(script):
    beside_python = f"{Path(sys.executable).parent}{os.pathsep}{os.environ['PATH']}"
    linter = shutil.which("shellcheck", path=beside_python)
    assert linter, "the linter comes with the test extra"
    found = subprocess.run(
        [linter, "--external-sources", str(script)],
        cwd=CLONE,
        capture_output=True,
        text=True,
        timeout=60,
        check=False,
    )

    assert (found.returncode, found.stdout) == (0, "")


class TestInstall:
    def test_puts_everything_below_the_root(self, tmp_path):
        assert install(tmp_path).returncode == 0

        assert set(contents(tmp_path)) == {
            "etc/idlerwatch/idlerwatch.toml",
            "etc/idlerwatch/mqtt-password",
            "etc/idlerwatch/influx-token",
            "etc/systemd/system/idlerwatch.service",
            "etc/udev/rules.d/70-idlerwatch.rules",
            "etc/modules-load.d/idlerwatch.conf",
            "opt/idlerwatch/share/README.md",
            "opt/idlerwatch/share/wiring.svg",
        }

    def test_secrets_and_settings_are_closed_to_others(self, tmp_path):
        install(tmp_path)

        for name in ("idlerwatch.toml", "mqtt-password", "influx-token"):
            assert stat.S_IMODE((tmp_path / "etc/idlerwatch" / name).stat().st_mode) == 0o640
        assert stat.S_IMODE((tmp_path / "etc/idlerwatch").stat().st_mode) == 0o750

    def test_a_second_run_changes_nothing(self, tmp_path):
        install(tmp_path)
        first = contents(tmp_path)

        assert install(tmp_path).returncode == 0
        assert contents(tmp_path) == first

    def test_settings_and_secrets_of_the_owner_stay(self, tmp_path):
        install(tmp_path)
        (tmp_path / "etc/idlerwatch/idlerwatch.toml").write_text("mine")
        (tmp_path / "etc/idlerwatch/mqtt-password").write_text("secret")

        install(tmp_path)

        assert (tmp_path / "etc/idlerwatch/idlerwatch.toml").read_text() == "mine"
        assert (tmp_path / "etc/idlerwatch/mqtt-password").read_text() == "secret"

    def test_an_outdated_unit_is_replaced(self, tmp_path):
        install(tmp_path)
        unit = tmp_path / "etc/systemd/system/idlerwatch.service"
        unit.write_text("[Service]\n")

        install(tmp_path)

        assert unit.read_bytes() == (CLONE / "deploy/idlerwatch.service").read_bytes()

    def test_a_dry_run_tells_and_touches_nothing(self, tmp_path):
        told = install(tmp_path, "--dry-run", "--broker")

        assert told.returncode == 0
        assert "idlerwatch.service" in told.stderr
        assert list(tmp_path.iterdir()) == []

    def test_an_unknown_option_is_a_sentence_and_exit_2(self, tmp_path):
        told = install(tmp_path, "--brocker")

        assert told.returncode == 2
        assert told.stderr.startswith("--brocker is no option of install.sh")
        assert list(tmp_path.iterdir()) == []

    def test_a_root_that_is_not_there_is_a_sentence_and_exit_2(self, tmp_path):
        told = install(tmp_path / "absent")

        assert told.returncode == 2
        assert told.stderr == f"--root is {tmp_path / 'absent'}, must be a folder that exists\n"


class TestUninstall:
    def test_leaves_settings_secrets_and_data(self, tmp_path):
        install(tmp_path)
        (tmp_path / "var/lib/idlerwatch").mkdir(parents=True)
        (tmp_path / "var/lib/idlerwatch/week.sqlite").write_text("data")

        assert shell(CLONE / "deploy/uninstall.sh", "--root", tmp_path).returncode == 0

        assert set(contents(tmp_path)) == {
            "etc/idlerwatch/idlerwatch.toml",
            "etc/idlerwatch/mqtt-password",
            "etc/idlerwatch/influx-token",
            "var/lib/idlerwatch/week.sqlite",
        }

    def test_takes_everything_when_told(self, tmp_path):
        install(tmp_path)

        shell(CLONE / "deploy/uninstall.sh", "--root", tmp_path, "--purge")

        assert contents(tmp_path) == {}

    def test_twice_is_as_good_as_once(self, tmp_path):
        assert shell(CLONE / "deploy/uninstall.sh", "--root", tmp_path).returncode == 0
        assert shell(CLONE / "deploy/uninstall.sh", "--root", tmp_path, "--purge").returncode == 0


class TestTry:
    def clone(self, folder: Path) -> Path:
        (folder / "deploy").mkdir(parents=True)
        for name in ("try.sh", "environment.sh"):
            shutil.copy(CLONE / "deploy" / name, folder / "deploy" / name)
        (folder / "pyproject.toml").write_text("[project]\n")
        return folder / "deploy" / "try.sh"

    def environment(self, folder: Path) -> Path:
        """Make an environment of fakes that write down how they were called."""
        (folder / "bin").mkdir(parents=True)
        (folder / "pyvenv.cfg").touch()
        for name in ("python", "idlerwatch"):
            program = folder / "bin" / name
            program.write_text(f'#!/bin/sh\necho {name} "$@" >>{folder}/calls\n')
            program.chmod(0o755)
        return folder

    def test_installs_once_and_hands_the_words_on(self, tmp_path):
        script = self.clone(tmp_path / "clone")
        environment = self.environment(tmp_path / "environment")

        for _ in range(2):
            assert shell(script, "--for", "60", IDLERWATCH_VENV=str(environment)).returncode == 0

        calls = (environment / "calls").read_text().splitlines()
        assert sum("pip install" in call for call in calls) == 1
        assert [call for call in calls if call.startswith("idlerwatch")] == ["idlerwatch demo --for 60"] * 2

    def test_installs_again_when_the_requirements_changed(self, tmp_path):
        script = self.clone(tmp_path / "clone")
        environment = self.environment(tmp_path / "environment")
        shell(script, IDLERWATCH_VENV=str(environment))
        (tmp_path / "clone/pyproject.toml").write_text("[project]\ndependencies = []\n")

        shell(script, IDLERWATCH_VENV=str(environment))

        assert (environment / "calls").read_text().count("pip install") == 2

    def test_without_a_recent_python_says_so(self, tmp_path):
        script = self.clone(tmp_path / "clone")
        programs = tmp_path / "programs"
        programs.mkdir()
        for name in ("dirname", "cat", "cksum", "ls"):
            (programs / name).symlink_to(str(shutil.which(name)))
        old = programs / "python3"
        old.write_text('#!/bin/sh\n[ "$1" != -V ] || { echo Python 3.9.2; exit 0; }\nexit 1\n')
        old.chmod(0o755)

        told = subprocess.run(
            [str(shutil.which("sh")), str(script)],
            env={"PATH": str(programs)},
            capture_output=True,
            text=True,
            timeout=60,
            check=False,
        )

        # a machine with a recent python beside its servers, in /usr/sbin, does not exist
        assert told.returncode == 2
        assert told.stderr.startswith("No Python 3.11 or later found (python3 is Python 3.9.2)")

    def test_a_folder_that_is_no_environment_is_left_alone(self, tmp_path):
        script = self.clone(tmp_path / "clone")
        precious = tmp_path / "home"
        precious.mkdir()
        (precious / "letter").write_text("dear")

        told = shell(script, IDLERWATCH_VENV=str(precious))

        assert told.returncode == 2
        assert "is no virtual environment" in told.stderr
        assert (precious / "letter").read_text() == "dear"
