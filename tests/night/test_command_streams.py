"""What goes to stdout and what to stderr; the real process, its exit status and its silence."""

import re
import subprocess
import sys

import numpy as np

ENTRY = "import sys; from ensemble_horizon.cli import main; main(sys.argv[1:])"


def test_quiet_prints_nothing_to_stdout(night):
    night.write()
    night.settings()
    commands = (
        ("estimate", night.config, "--quiet"),
        ("survey", night.config, "-q"),
        ("survey", night.files, "--quiet", "--json", night.folder / "s.json"),
        ("reach", night.config, "--variable", "t2", "--tolerance", "1.0", "--quiet"),
    )
    for arguments in commands:
        result = night.run(*arguments)
        assert result.exit_code == 0, result.stderr
        assert result.stdout == "", arguments
        assert result.stderr == "", arguments
    assert len(night.rows()) == 1
    assert (night.folder / "s.json").is_file()


def test_quiet_keeps_the_message_of_an_error(night, refusal):
    night.settings()
    result = night.estimate("--quiet")
    refusal(result, 3, "m{member:02d}.nc")
    assert result.stdout == ""


def test_a_quiet_survey_that_finds_nothing_usable_says_why_on_stderr(night, growing):
    night.write(growing()[:1])
    result = night.run("survey", night.member(0), "--quiet")
    assert result.exit_code == 3
    assert result.stdout == ""
    assert "member" in result.stderr


def test_logs_go_to_stderr_and_the_table_to_stdout(night, growing):
    values = growing()
    values[2, 5, 3] = np.nan
    night.write(values)
    night.settings()
    result = night.estimate("--verbose")
    assert result.exit_code == 0
    assert "tolerance 1.5" in result.stdout
    assert "INFO" not in result.stdout
    assert "WARNING" not in result.stdout
    assert "WARNING" in result.stderr
    assert "INFO" in result.stderr
    assert re.search(r"\d+(\.\d+)? ?s", result.stderr), "no duration of a stage"
    assert "Lead-time limits" not in result.stderr


def test_warnings_are_not_logged_twice(night, growing):
    values = growing()
    values[2, 5, 3] = np.nan
    night.write(values)
    night.settings()
    for _ in range(2):
        result = night.estimate()
        told = [line for line in result.stderr.splitlines() if "member 2, t2" in line]
        assert len(told) == 1


def test_the_table_carries_the_caution_and_the_folder(night):
    night.write()
    night.settings()
    result = night.estimate()
    assert "official" in result.stdout
    assert str(night.products) in result.stdout


def test_the_command_as_a_process_of_its_own(night):
    night.write()
    night.settings()

    def call(*arguments):
        return subprocess.run(
            [sys.executable, "-W", "error::RuntimeWarning", "-c", ENTRY, *map(str, arguments)],
            capture_output=True, text=True, check=False, cwd=night.folder,
        )  # fmt: skip

    done = call("estimate", "settings.toml")
    assert done.returncode == 0, done.stderr
    assert done.stderr == ""
    assert "tolerance 1.5" in done.stdout
    lost = call("estimate", "elsewhere.toml")
    assert lost.returncode == 2
    assert lost.stdout == ""
    assert lost.stderr.count("\n") == 1
    assert "Traceback" not in lost.stderr


def test_help_of_every_command(night):
    for name in ("survey", "estimate", "reach"):
        result = night.run(name, "--help")
        assert result.exit_code == 0
        assert result.stdout.startswith("Usage:")
    assert "estimate" in night.run("--help").stdout
    assert re.search(r"\d+\.\d+", night.run("--version").stdout)
