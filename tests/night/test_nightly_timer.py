"""The cron line and the systemd units of the README, read as cron and systemd read them."""

from __future__ import annotations

import re
import shutil
import subprocess
from pathlib import Path

import pytest

README = Path(__file__).parents[2] / "README.md"
PROGRAM = "/opt/horizons/.venv/bin/ensemble-horizon"


def units() -> dict[str, str]:
    """The units of the README by name."""
    text = README.read_text(encoding="utf-8")
    return dict(re.findall(r"```ini\n# /etc/systemd/system/(\S+)\n(.*?)```", text, re.DOTALL))


def said(tmp_path: Path, shell: str, now: str) -> list[str]:
    """Arguments that a line of shell gives to the program, at a moment of a clock of our own."""
    for name, line in {
        "ensemble-horizon": 'printf "%s\\n" "$@"',
        "date": f'args=$(printf "%s" "$*" | sed "s/-u //; s/--date=-6hours //"); '
        f'case "$*" in *-6hours*) d="{now} 6 hours ago";; *) d="{now}";; esac; '
        '/bin/date -u --date="$d" "$args"',
    }.items():
        (tmp_path / name).write_text(f"#!/bin/sh\n{line}\n", encoding="utf-8")
        (tmp_path / name).chmod(0o755)
    shell = shell.replace(PROGRAM, str(tmp_path / "ensemble-horizon"))
    shell = shell.replace("/srv/horizons/nightly.log", str(tmp_path / "log"))
    done = subprocess.run(
        ["/bin/sh", "-c", shell], env={"PATH": f"{tmp_path}:/usr/bin:/bin"}, text=True,
        capture_output=True, check=True,
    )  # fmt: skip
    log = tmp_path / "log"
    return (done.stdout + (log.read_text() if log.exists() else "")).splitlines()


def arguments(start: str) -> list[str]:
    return [
        "nightly", "/srv/horizons/night.toml", "--start", start, "--wait", "60",
        "--report", "/srv/horizons/report.json",
    ]  # fmt: skip


def test_the_cron_line(tmp_path):
    """crontab(5): five fields; an unescaped % ends the command, and one with a backslash is a %."""
    (line,) = re.findall(r"^30 6 \* \* \*  (.*)$", README.read_text(encoding="utf-8"), re.MULTILINE)
    assert PROGRAM in line
    assert not re.search(r"(?<!\\)%", line)
    command = line.replace(r"\%", "%")
    assert said(tmp_path, command, "2031-02-14 06:30") == arguments("2031-02-14T00")


@pytest.mark.parametrize(
    "now, start",
    [
        ("2031-02-14 06:30", "2031-02-14T00"),
        ("2031-02-14 23:59", "2031-02-14T00"),
        ("2031-02-15 00:10", "2031-02-14T00"),
        ("2031-02-15 06:30", "2031-02-15T00"),
    ],
)
def test_the_service_means_the_same_start_at_every_try(tmp_path, now, start):
    """systemd.service(5): %% is a %, and $$ a $; one pair of quotes holds one argument."""
    (line,) = re.findall(r"^ExecStart=(.*)$", units()["horizons.service"], re.MULTILINE)
    found = re.fullmatch(r"/bin/sh -c '([^']*)'", line.replace("%%", "\0"))
    assert found is not None
    assert "%" not in found[1]
    assert "$" not in found[1].replace("$$", "")
    command = found[1].replace("\0", "%").replace("$$", "$")
    assert said(tmp_path, command, now) == arguments(start)


def test_the_service_does_not_try_for_ever():
    text = units()["horizons.service"]
    keys = dict(re.findall(r"^(\w+)=(.*)$", text, re.MULTILINE))
    burst, pause = int(keys["StartLimitBurst"]), int(keys["RestartSec"].removesuffix("min"))
    hours = burst * (60 + pause) / 60  # every try waits for an hour
    assert hours < int(keys["StartLimitIntervalSec"].removesuffix("h")) < 24
    assert keys["RestartPreventExitStatus"] == "2"
    assert keys["SuccessExitStatus"] == str(128 + 15)


@pytest.mark.skipif(shutil.which("systemd-analyze") is None, reason="no systemd here")
def test_systemd_understands_the_units(tmp_path):
    for name, text in units().items():
        (tmp_path / name).write_text(text, encoding="utf-8")
    found = subprocess.run(
        ["systemd-analyze", "verify", "--man=no", *(str(tmp_path / name) for name in units())],
        text=True, capture_output=True, check=False,
    )  # fmt: skip
    told = [line for line in found.stderr.splitlines() if "horizons" in line]
    assert (found.returncode, told) == (0, [])
