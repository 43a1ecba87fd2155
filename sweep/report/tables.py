"""A result as text files: `result.json`, `readings.csv`, `stops.csv`, and the way back.

Numbers carry six significant digits: more than any reading is sure of, few enough that the last bits of a
calculation, which differ from machine to machine, stay out of the files. UTF-8, lines end in a line feed, and
nothing depends on locale, time or folder.
"""

import csv
import io
import json
import math
from collections.abc import Sequence
from dataclasses import fields, is_dataclass
from typing import Any

from pydantic import TypeAdapter, ValidationError

from sweep.errors import SourceError, SweepError
from sweep.result import SCHEMA, Reading, Result, Stop

DIGITS = 6
"""Significant digits of every number."""

_PARTS = ("recommendation", "stops", "readings", "camera", "model", "depth_map", "warnings", "source")


def result_json(result: Result) -> bytes:
    """The result as `result.json`, schema first. Raises SweepError where a number is not finite."""
    document = {"schema": SCHEMA} | {part: _plain(getattr(result, part), part) for part in _PARTS}
    return (_pretty(document) + "\n").encode()


def readings_csv(result: Result) -> bytes:
    """The readings, one a row; codes of `why_not` are joined by a space, an unknown figure is an empty field."""
    return _csv(result.readings, Reading, "readings")


def stops_csv(result: Result) -> bytes:
    """The stops, one a row, written as `readings_csv` does."""
    return _csv(result.stops, Stop, "stops")


def read_result(data: bytes, where: str = "result.json") -> Result:
    """Read a `result.json` back; keys of later versions are skipped. Raises SourceError with one sentence."""
    try:
        document = json.loads(data)
    except (ValueError, RecursionError):
        raise SourceError(f"{where} is not a JSON file: name a result.json that this tool wrote.") from None
    schema = document.get("schema") if isinstance(document, dict) else None
    if schema != SCHEMA:
        raise SourceError(f"{where} is of schema {schema!r}, not {SCHEMA!r}: name a result.json of this version.")
    try:
        return TypeAdapter(Result).validate_python(document)
    except ValidationError as error:
        first = error.errors(include_url=False)[0]
        key = ".".join(str(part) for part in first["loc"])
        raise SourceError(f"{where} is damaged at {key} ({first['msg']}): replay the source again.") from None


def _plain(value: Any, where: str) -> Any:
    """A record as what JSON knows, its numbers rounded; `where` names a number that is none."""
    if is_dataclass(value):
        return {f.name: _plain(getattr(value, f.name), f"{where}.{f.name}") for f in fields(value)}
    if isinstance(value, tuple):
        return [_plain(v, f"{where}[{i}]") for i, v in enumerate(value)]
    if value is None or isinstance(value, str | bool):
        return value
    if isinstance(value, int):
        return value
    if not isinstance(value, float):
        raise TypeError(f"{where} is a {type(value).__name__}")
    if not math.isfinite(value):
        raise SweepError(f"{where} came out as {value}; this is a fault of the tool. Please report it with the sweep.")
    return float(f"{value:.{DIGITS}g}") + 0.0  # + 0.0: there is no -0


def _pretty(value: Any, indent: str = "", levels: int = 2) -> str:
    """JSON with one line a stop, reading and warning, so that two results can be compared line by line."""
    inner = indent + "  "
    if isinstance(value, dict) and value and levels:
        lines = [f"{inner}{_line(k)}: {_pretty(v, inner, levels - 1)}" for k, v in value.items()]
        return "{\n" + ",\n".join(lines) + f"\n{indent}}}"
    if isinstance(value, list) and value and isinstance(value[0], dict):
        return "[\n" + ",\n".join(inner + _line(v) for v in value) + f"\n{indent}]"
    return _line(value)


def _line(value: Any) -> str:
    return json.dumps(value, ensure_ascii=False, allow_nan=False)


def _csv(rows: Sequence[Reading] | Sequence[Stop], record: type[Reading] | type[Stop], where: str) -> bytes:
    text = io.StringIO(newline="")
    writer = csv.writer(text, lineterminator="\n")
    writer.writerow(f.name for f in fields(record))
    for i, row in enumerate(rows):
        writer.writerow(_field(v) for v in _plain(row, f"{where}[{i}]").values())
    return text.getvalue().encode()


def _field(value: Any) -> str:
    if value is None:
        return ""
    if isinstance(value, bool):
        return "true" if value else "false"
    return " ".join(value) if isinstance(value, list) else str(value)
