"""The text of a station file -> a station, or one message that tells every mistake with its key."""

import re
import tomllib
from collections import Counter
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from difflib import get_close_matches
from typing import Any

from pydantic import ValidationError
from pydantic_core import ErrorDetails

from sweep.errors import StationError
from sweep.station.records import TABLES, Station, Table, what_belongs_at


@dataclass(frozen=True, slots=True)
class _Mistake:
    """One mistake: the key, and what follows it in the sentence."""

    key: str
    what: str


def parse_station(text: str, where: str = "station.toml") -> Station:
    """Read a station file's text; `where` names it in messages. Raises StationError with every mistake in it."""
    try:
        data = tomllib.loads(text.removeprefix("\ufeff"))
    except tomllib.TOMLDecodeError as error:
        raise StationError(f"{where} is not valid TOML: {_line_first(str(error), text)}. Mend that line.") from None
    except (ValueError, RecursionError):  # numbers of thousands of digits, thousands of nested brackets
        raise StationError(f"{where} is not valid TOML: a value is far too long or too deeply nested.") from None
    return build_station(data, where)


def build_station(data: Mapping[str, Any], where: str = "station.toml") -> Station:
    """Make a station from the tables of its file. Raises StationError with every mistake in them."""
    mistakes: list[_Mistake] = []
    station = None
    try:
        station = Station.model_validate(data)
    except ValidationError as error:
        errors = error.errors(include_url=False)
        misspelt = {_meant(e) for e in errors if e["type"] == "extra_forbidden"}
        mistakes = [_mistake(e) for e in errors if _key(e["loc"]) not in misspelt or "missing" not in e["type"]]
    mistakes += [*_same_names(data), *_too_few_stops(data), *_no_limit(data)]
    if station is not None:
        mistakes += _behind_the_lens(station)
    if mistakes or station is None:
        raise StationError(_message(mistakes, where))
    return station


def check_regions(station: Station, width: int, height: int) -> None:
    """See that every patch lies inside a frame of that size (px). Raises StationError that names those that don't."""
    outside = []
    for i, target in enumerate(station.targets):
        for j, patch in enumerate(target.patches):
            x, y, across, down = patch.region
            if x + across > width or y + down > height:
                what = f" = {list(patch.region)} of {_shown(target.name)} reaches outside the frame"
                what += f" of {width} x {height} pixels: move or shrink it"
                outside.append(_Mistake(f"targets[{i}].patches[{j}].region", what))
    if outside:
        raise StationError(_message(outside, "The station file"))


def _same_names(data: Mapping[str, Any]) -> Iterator[_Mistake]:
    targets = data.get("targets")
    names = [t.get("name") for t in targets if isinstance(t, dict)] if isinstance(targets, list | tuple) else []
    for name, count in Counter(n.strip() for n in names if isinstance(n, str)).items():
        if count > 1:
            yield _Mistake("targets", f": {count} have the name {_shown(name)}; give each its own")


def _too_few_stops(data: Mapping[str, Any]) -> Iterator[_Mistake]:
    lens = data.get("lens")
    stops = lens.get("stops") if isinstance(lens, dict) else None
    if isinstance(stops, list | tuple) and len(stops) == 1:
        what = f" = {_shown(stops)} has one stop only: a sweep needs at least two, widest (smallest) first"
        yield _Mistake("lens.stops", what)


def _no_limit(data: Mapping[str, Any]) -> Iterator[_Mistake]:
    """A need that does not say how long an exposure may be."""
    need = data.get("need")
    if not isinstance(need, dict) or "max_exposure_ms" in need:
        return
    what = " is missing: state it in ms, or speed_mm_s and blur_px, from which it follows"
    if "speed_mm_s" not in need or "blur_px" not in need:
        yield _Mistake("need.max_exposure_ms", what)
    elif need["speed_mm_s"] == 0:
        yield _Mistake("need.max_exposure_ms", " is missing: speed_mm_s = 0 sets no limit, so state one in ms")


def _behind_the_lens(station: Station) -> Iterator[_Mistake]:
    """Depths at which nothing can stand: at the entrance pupil and behind it."""
    nearest = -station.pupil_distance_mm
    depths = [(f"targets[{i}].depth_mm", t.depth_mm) for i, t in enumerate(station.targets)]
    if station.need.depth_range_mm is not None:
        depths.append(("need.depth_range_mm", station.need.depth_range_mm[0]))
    for key, depth_mm in depths:
        if depth_mm <= nearest:
            what = (
                f" = {depth_mm:g} lies behind the lens: by focal_length_mm, pixel_pitch_um and object_um_per_px it is"
            )
            what += (
                f" {-nearest:.4g} mm from its entrance pupil to the plane of focus; positive depths lead away from it"
            )
            yield _Mistake(key, what)


def _mistake(error: ErrorDetails) -> _Mistake:
    """What pydantic found, in words: what is wrong, what is allowed."""
    table, last = _table(error), str(error["loc"][-1])
    kind, context = error["type"], error.get("ctx", {})
    if kind == "extra_forbidden":
        what = f" is not a key of the station file: {_nearest(last, table)}"
    elif kind == "key_of_another_kind":
        what = f" does not belong to a patch of kind {context['kind']!r}: take it out"
    elif kind in ("missing", "key_missing"):
        what = f" is missing: it must be {context.get('what') or what_belongs_at(table, last)}"
    else:
        what = f" = {_shown(error['input'])}: must be {context.get('what') or what_belongs_at(table, last)}"
    return _Mistake(_key(error["loc"]), what)


def _table(error: ErrorDetails) -> type[Table]:
    """The table that the mistaken key stands in."""
    above = [part for part in error["loc"][:-1] if isinstance(part, str)]
    return TABLES[above[-1]] if above else Station


def _meant(error: ErrorDetails) -> str:
    """The full name of the key that an unknown one stands for; empty where none is near."""
    *above, last = error["loc"]
    near = _near(str(last), _table(error))
    return _key((*above, near)) if near else ""


def _nearest(key: str, table: type[Table]) -> str:
    near = _near(key, table)
    if near:
        return f"use {near}, if that is meant"
    homes = [name for name, other in TABLES.items() if key in other.model_fields]
    if homes:
        return f"it belongs to {homes[0]}"
    return f"the keys here are {', '.join(table.model_fields)}"


def _near(key: str, table: type[Table]) -> str | None:
    return next(iter(get_close_matches(key, table.model_fields, n=1, cutoff=0.6)), None)


def _key(loc: tuple[int | str, ...]) -> str:
    """A place in the file as `targets[1].patches[0].region`."""
    text = ""
    for part in loc:
        if isinstance(part, int):
            text += f"[{part}]"
        else:
            text += ("." if text else "") + (part if re.fullmatch(r"[\w-]{1,60}", part) else _shown(part))
    return text


def _shown(value: object) -> str:
    """A value on one line, cut to a readable length."""
    text = f'"{value}"' if isinstance(value, str) else str(value).lower() if isinstance(value, bool) else repr(value)
    text = "".join(c if c.isprintable() else "?" for c in text)
    return text if len(text) <= 60 else text[:57] + "..."


def _line_first(text: str, document: str) -> str:
    """A TOML message with its place in front: `line 3, column 5: what`."""
    found = re.fullmatch(r"(.*) \(at (?:line (\d+), column (\d+)|(end of document))\)", text, re.DOTALL)
    what = "".join(c if c.isprintable() else "?" for c in (found[1] if found else text))
    if found is None:
        return what
    place = f"line {len(document.splitlines())}, at the end" if found[4] else f"line {found[2]}, column {found[3]}"
    return f"{place}: {what}"


def _message(mistakes: Sequence[_Mistake], where: str) -> str:
    """All mistakes in at most four lines; those that don't fit are counted and their keys named."""
    lines = [f"{m.key}{m.what}." for m in mistakes]
    if len(lines) == 1:
        return f"{where}: {lines[0]}"
    if len(lines) > 3:
        keys = list(dict.fromkeys(m.key for m in mistakes[2:]))
        more = ", ".join(keys[:8]) + (" and others" if len(keys) > 8 else "")
        lines = [*lines[:2], f"and {len(lines) - 2} more, at {more}."]
    return "\n  ".join((f"{where} has {len(mistakes)} mistakes:", *lines))
