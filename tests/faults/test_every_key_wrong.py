"""A settings file in which every key there is has a wrong value, and every table a wrong key."""

from __future__ import annotations

import json
import typing
from typing import Any

from click.testing import CliRunner

from ensemble_horizon.cli.main import group
from ensemble_horizon.settings.criteria import Table
from ensemble_horizon.settings.tables import Settings

NONSENSE = {"wrong": [[0]]}  # a table of lists of lists: no key takes that
UNKNOWN = "no_such_key"


def parts_of(annotation: Any) -> list[Any]:
    """All types that a type is made of."""
    inner = [part for item in typing.get_args(annotation) for part in parts_of(item)]
    return [annotation, *inner]


def wrong(model: type[Table], path: str) -> tuple[dict[str, Any], list[str]]:
    """A table in which all is wrong, and the keys that a message must name."""
    table: dict[str, Any] = {UNKNOWN: 1}
    keys = [f"{path}{UNKNOWN}"]
    for name, field in model.model_fields.items():
        if field.exclude:
            continue
        parts = parts_of(field.annotation)
        below = [part for part in parts if isinstance(part, type) and issubclass(part, Table)]
        if not below:
            table[name] = NONSENSE
            keys.append(f"{path}{name}")
            continue
        origins = {typing.get_origin(part) for part in parts}
        step = "[0]" if tuple in origins else ".some" if dict in origins else ""
        content, more = wrong(below[0], f"{path}{name}{step}.")
        table[name] = {"[0]": [content], ".some": {"some": content}, "": content}[step]
        keys += more
    return table, keys


def toml(value: Any) -> str:
    """Plain values as TOML on one line."""
    if isinstance(value, dict):
        return "{" + ", ".join(f"{key} = {toml(item)}" for key, item in value.items()) + "}"
    if isinstance(value, list):
        return "[" + ", ".join(map(toml, value)) + "]"
    return json.dumps(value)


def test_every_mistake_is_told_at_once_with_its_key(tmp_path):
    table, keys = wrong(Settings, "")
    assert {"night.archive", "runs.files", "variables.some.criteria[0].tolerance"} < set(keys)
    assert len(keys) > 70
    config = tmp_path / "night.toml"
    lines = [f"{key} = {toml(value)}" for key, value in table.items()]
    config.write_text("\n".join(lines), encoding="utf-8")
    result = CliRunner().invoke(group, ["nightly", str(config), "--report", f"{tmp_path}/r.json"])
    assert result.exit_code == 2, result.stderr
    assert "Traceback" not in result.stderr
    assert result.stderr.count("ensemble-horizon: ") == 1
    told = [line.strip() for line in result.stderr.splitlines()]
    silent = [k for k in keys if not any(t.startswith((f"{k}:", f"{k}.", f"{k} ")) for t in told)]
    assert silent == []
    assert f"found {sum(': ' in line for line in told[1:])}" in told[0]
    report = json.loads((tmp_path / "r.json").read_text(encoding="utf-8"))
    assert report["error"]["kind"] == "SettingsError"
    assert report["exit_status"] == 2
    assert {path.name for path in tmp_path.iterdir()} == {"night.toml", "r.json"}
