"""Templates of file names: ``runs/{start:%Y%m%d%H}/member{member:02d}.nc``.

A template is only ever compared with names; nothing in it is evaluated.
"""

from __future__ import annotations

import glob
import re
import string
from dataclasses import dataclass
from datetime import datetime

from ensemble_horizon.errors import ArgumentError

FIELDS = ("start", "member", "lead")

# Date codes as in strftime: the pattern, and the part of the date it gives.
DATE_CODES = {
    "Y": (r"\d{4}", "year"),
    "y": (r"\d{2}", "year"),
    "m": (r"\d{2}", "month"),
    "d": (r"\d{2}", "day"),
    "j": (r"\d{3}", "day of the year"),
    "H": (r"\d{2}", "hour"),
    "M": (r"\d{2}", "minute"),
    "S": (r"\d{2}", "second"),
}
DEFAULT_DATE = "%Y%m%d%H"

_WILDCARDS = {"**/": "(?:.*/)?", "**": ".*", "*": "[^/]*", "?": "[^/]"}
_NUMBER_FORMAT = re.compile(r"^0?(\d*)d$")


@dataclass(frozen=True)
class NameParts:
    """What a file name says: start, member and lead in hours, each None where it says nothing."""

    start: datetime | None = None
    member: int | str | None = None
    lead: float | None = None


@dataclass(frozen=True)
class Template:
    """A parsed template; see `parse_template`."""

    text: str
    pattern: str
    expression: str
    dates: tuple[str, ...]
    fields: frozenset[str]

    def match(self, name: str) -> NameParts | None:
        """What ``name`` says, or None when it does not fit the template."""
        found = re.fullmatch(self.expression, name)
        if found is None:
            return None
        groups = found.groupdict()
        start = None
        if self.dates:
            codes = "|".join(self.dates)
            try:
                start = datetime.strptime(
                    "|".join(groups[f"date{i}"] for i in range(len(self.dates))), codes
                )
            except ValueError:
                return None
        member = groups.get("member")
        lead = groups.get("lead")
        return NameParts(
            start=start,
            member=None if member is None else member_label(member),
            lead=None if lead is None else float(lead),
        )


def member_label(text: str) -> int | str:
    """A member's label: a number where the text is one.

    Examples
    --------
    >>> member_label("007"), member_label("r1i1p1")
    (7, 'r1i1p1')
    """
    return int(text) if re.fullmatch(r"\d+", text) else text


def is_template(text: str) -> bool:
    """Whether ``text`` holds a field in braces."""
    return "{" in text or "}" in text


def parse_template(text: str) -> Template:
    """Parse a template of file names.

    Parameters
    ----------
    text : str
        A path with the fields ``{start:CODES}`` (codes as in strftime: %Y %y %m %d %j %H %M %S;
        %Y%m%d%H if none are given), ``{member}`` or ``{member:03d}``, ``{lead}`` or
        ``{lead:03d}`` (hours), and the wildcards ``*``, ``**`` and ``?``.

    Raises
    ------
    ArgumentError
        For another field, an attribute or index of a field, or a format that is not one of these.

    Examples
    --------
    >>> template = parse_template("{start:%Y%m%d}/m{member:02d}_*.nc")
    >>> template.match("20240105/m07_fine.nc")
    NameParts(start=datetime.datetime(2024, 1, 5, 0, 0), member=7, lead=None)
    >>> template.pattern
    '????????/m*_*.nc'
    """
    try:
        parts = list(string.Formatter().parse(text))
    except ValueError as error:
        raise _refusal(text, f"braces that do not pair ({error})") from None
    expression, pattern = "", ""
    dates: list[str] = []
    seen: set[str] = set()
    for literal, field, form, conversion in parts:
        expression += _wildcards(literal)
        pattern += glob.escape(literal.replace("*", "\0").replace("?", "\1"))
        if field is None:
            continue
        if field not in FIELDS or conversion:
            raise _refusal(text, "{" + field + ("!" + conversion if conversion else "") + "}")
        if field == "start":
            code = form or DEFAULT_DATE
            date_expression, date_pattern = _date(text, code)
            expression += f"(?P<date{len(dates)}>{date_expression})"
            pattern += date_pattern
            dates.append(code)
        elif field in seen:
            expression += f"(?P={field})"
            pattern += "*"
        else:
            expression += f"(?P<{field}>{_number(text, field, form or '')})"
            pattern += "*"
        seen.add(field)
    pattern = pattern.replace("\0", "*").replace("\1", "?")
    return Template(text, pattern, expression, _distinct_dates(text, dates), frozenset(seen))


def _wildcards(literal: str) -> str:
    parts = re.split(r"(\*\*/|\*\*|\*|\?)", literal)
    return "".join(_WILDCARDS.get(part, re.escape(part)) for part in parts)


def _date(text: str, code: str) -> tuple[str, str]:
    expression, pattern = "", ""
    for plain, letter in re.findall(r"([^%])|%(.)", code):
        if plain:
            expression += re.escape(plain)
            pattern += glob.escape(plain)
        elif letter in DATE_CODES:
            digits = DATE_CODES[letter][0]
            expression += digits
            pattern += "?" * int(digits[3])
        else:
            raise _refusal(text, f"the date code %{letter}")
    return expression, pattern


def _number(text: str, field: str, form: str) -> str:
    if form in ("", "s"):
        return r"[^/]+?" if field == "member" else r"\d+(?:\.\d+)?"
    numbered = _NUMBER_FORMAT.match(form)
    if numbered is None:
        raise _refusal(text, "{" + f"{field}:{form}" + "}")
    width = int(numbered.group(1) or 1)
    return rf"\d{{{width},}}"


def _distinct_dates(text: str, dates: list[str]) -> tuple[str, ...]:
    # strptime refuses a code that occurs twice, so a repeated part keeps only new codes.
    seen: set[str] = set()
    for code in dates:
        letters = re.findall(r"%(.)", code)
        if seen & set(letters):
            raise _refusal(text, "the same part of the date twice")
        seen |= set(letters)
    if dates and not ({"Y", "y"} & seen and ({"m", "d"} <= seen or "j" in seen)):
        raise _refusal(text, "a start without year, month and day")
    return tuple(dates)


def _refusal(text: str, found: str) -> ArgumentError:
    return ArgumentError(
        f"template {text!r}",
        expected="the fields {start:%Y%m%d%H}, {member:02d} and {lead:03d} with plain formats",
        found=found,
        remedy="write only these fields, with * for parts of the name that do not matter",
    )
