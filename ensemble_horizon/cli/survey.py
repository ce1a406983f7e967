"""The command ``survey``."""

from __future__ import annotations

import json
from collections.abc import Callable
from pathlib import Path

import click

from ensemble_horizon.cli.session import common_options, progress
from ensemble_horizon.errors import InputError
from ensemble_horizon.night.input import choose_starts, find_runs, survey
from ensemble_horizon.products import written_whole
from ensemble_horizon.runs import SurveyReport, survey_runs
from ensemble_horizon.settings import read_settings


@click.command("survey")
@click.argument("target", nargs=-1, required=True)
@click.option("--lagged", is_flag=True, help="Members come from different starts (files only).")
@click.option("--headers-only", is_flag=True, help="Do not read the values.")
@click.option("--json", "json_file", type=click.Path(), help="Write the report as JSON, too.")
@common_options
def command(
    target: tuple[str, ...], lagged: bool, headers_only: bool, json_file: str | None, quiet: bool
) -> None:
    """Say what is there, what is missing and what is suspect, and give a verdict.

    TARGET is a settings file (.toml), or run files, a glob, or a template with {start}, {member}
    and {lead}. The exit status is 3 where the verdict is "not usable".
    """
    with progress(quiet) as bars:
        report = _survey(target, lagged, headers_only, lambda n, of: bars("survey", n, of))
    if json_file is not None:
        with written_whole(json_file) as path:
            Path(path).write_text(json.dumps(report.as_dict(), indent=2) + "\n", encoding="utf-8")
    if not quiet:
        click.echo(report.text(), nl=False)
    if not report.usable:
        raise InputError(
            " ".join(target),
            expected="usable runs",
            found="; ".join(report.reasons[:1]) or report.summary(),
            remedy="mend or leave out the files that the report names"
            + (", or lower runs.minimum_members" if _too_few(target, report) else ""),
        )


def _too_few(target: tuple[str, ...], report: SurveyReport) -> bool:
    """Whether a key of the settings decided."""
    return _has_settings(target) and len(report.short_starts) == len(report.starts)


def _has_settings(target: tuple[str, ...]) -> bool:
    return len(target) == 1 and target[0].endswith(".toml")


def _survey(
    target: tuple[str, ...],
    lagged: bool,
    headers_only: bool,
    advance: Callable[[int, int], None],
) -> SurveyReport:
    if _has_settings(target):
        settings = read_settings(target[0])
        catalogue = choose_starts(settings, find_runs(settings))
        return survey(settings, catalogue, content=not headers_only, progress=advance)
    files = target[0] if len(target) == 1 else list(target)
    return survey_runs(files, lagged=lagged, content=not headers_only, progress=advance)
