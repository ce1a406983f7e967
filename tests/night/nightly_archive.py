"""A small archive of several starts on disk, and the nightly command run on it."""

from __future__ import annotations

import json
from pathlib import Path

from click.testing import CliRunner, Result
from conftest import growing, write_member

from ensemble_horizon.cli.main import group
from ensemble_horizon.products.page import Briefing

MADE = "1900000000"  # seconds since 1970, for SOURCE_DATE_EPOCH: 2030-03-17T17:46:40Z


def light_briefing(folder: Path, briefing: Briefing) -> list[Path]:
    """In place of page and sheet, which take their time: all that is told on them, as text."""
    told = (
        briefing.title, briefing.start, briefing.made, briefing.members, briefing.troubles,
        briefing.notes, briefing.skill, briefing.no_skill, briefing.version, dict(briefing.usual),
        [limit.text for limit in briefing.limits()],
    )  # fmt: skip
    files = [folder / "briefing.html", folder / "briefing.pdf"]
    for path in files:
        path.write_text(f"{path.suffix} {told!r}", encoding="utf-8")
    return files


class Nightly:
    """Starts in folders ``2031021400``, a file per member, and a settings file beside them."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self.products = folder / "out"
        self.archive = folder / "archive"
        self.config = folder / "night.toml"
        self.report_file = folder / "report.json"

    def member(self, day: int, number: int, hour: int = 0) -> Path:
        return self.folder / f"203102{day:02d}{hour:02d}" / f"m{number:02d}.nc"

    def write(self, *days: int, members: int = 4, hour: int = 0) -> None:
        for day in days:
            for number in range(members):
                self.write_one(day, number, members, hour)

    def write_one(self, day: int, number: int, members: int = 4, hour: int = 0) -> Path:
        fields = {"t2": growing(members=members, seed=day)[number]}
        start = f"2031-02-{day:02d} {hour:02d}:00"
        return write_member(self.member(day, number, hour), fields, start=start)

    def settings(
        self,
        more: str = "",
        *,
        title: str = "Night",
        runs: str = "minimum_members = 3",
        night: str = 'archive = "archive"',
        products: str = 'maps = "none"\nfigures = false',
        tolerance: float = 1.5,
    ) -> Path:
        text = (
            f'title = "{title}"\n[runs]\nfiles = "{{start:%Y%m%d%H}}/m{{member:02d}}.nc"\n{runs}\n'
            f"[variables.t2]\ncriteria = [{{tolerance = {tolerance}}}]\n{more}\n"
            f'[engine]\nworkers = 1\n[products]\nfolder = "out"\n{products}\n'
        )
        self.config.write_text(text + (f"[night]\n{night}\n" if night else ""), encoding="utf-8")
        return self.config

    def run(self, *options: object, status: int = 0) -> Result:
        """The command with a report, which must end with ``status``."""
        arguments = ["nightly", self.config, "--report", self.report_file, *options]
        result = CliRunner().invoke(group, [str(item) for item in arguments])
        assert result.exit_code == status, (result.exit_code, result.stdout, result.stderr)
        assert "Traceback" not in result.stderr
        return result

    def report(self) -> dict:
        return json.loads(self.report_file.read_text(encoding="utf-8"))

    def states(self) -> dict[str, str]:
        """The state of each stage, by the report."""
        return {stage["name"]: stage["state"] for stage in self.report()["stages"]}

    def night(self, stamp: str = "20310214T00") -> Path:
        return self.products / stamp


def contents(folder: Path) -> dict[str, bytes]:
    """All files below a folder, hidden ones too, without locks; of a state only what is no time."""
    found = {}
    for path in sorted(folder.rglob("*")):
        name = path.relative_to(folder).as_posix()
        if path.is_file() and path.name != ".nightly.lock":
            found[name] = path.read_bytes() if path.name != "night.json" else _timeless(path)
    return found


def _timeless(path: Path) -> bytes:
    state = json.loads(path.read_text(encoding="utf-8"))
    del state["digest"]
    for stage in state["stages"].values():
        del stage["seconds"]
    return json.dumps(state, sort_keys=True).encode()
