"""A probe, or the list of cameras, as JSON; docs/probe.md says what the keys hold."""

import json
import math
from collections.abc import Mapping, Sequence

from sweep.cameras.present import Present
from sweep.probe import Probe
from sweep.report.tables import DIGITS

PROBE_SCHEMA = "sweep/probe/1"
CAMERAS_SCHEMA = "sweep/cameras/1"

_Value = str | int | float | None


def probe_json(probe: Probe, source: str) -> str:
    """The findings, one a line, with their figures; numbers of six significant digits, null where there is none."""
    head: dict[str, object] = {
        "schema": PROBE_SCHEMA,
        "source": source,
        "verdict": probe.verdict,
        "device": _plain(probe.device),
        "exposure_ms": _rounded(probe.exposure_ms),
        "tone": _rounded(probe.tone),
        "frames": probe.frames,
    }
    lines = [f"  {json.dumps(key)}: {_line(value)}," for key, value in head.items()]
    findings = [
        _line(
            {
                "code": finding.code,
                "verdict": finding.verdict,
                "found": finding.found,
                "to_do": finding.to_do,
                "figures": _plain(finding.figures),
            }
        )
        for finding in probe.findings
    ]
    return "\n".join(["{", *lines, '  "findings": [', ",\n".join(f"    {line}" for line in findings), "  ]", "}", ""])


def cameras_json(cameras: Sequence[Present], missing: str) -> str:
    """The cameras that are there, and why some kind could not be looked for."""
    found = [{"source": camera.source, "what": camera.what} for camera in cameras]
    document = {"schema": CAMERAS_SCHEMA, "cameras": found, "missing": missing}
    return json.dumps(document, ensure_ascii=False, indent=2) + "\n"


def _plain(values: Mapping[str, _Value]) -> dict[str, _Value]:
    return {key: _rounded(value) for key, value in values.items()}


def _rounded(value: _Value) -> _Value:
    if not isinstance(value, float):
        return value
    return float(f"{value:.{DIGITS}g}") + 0.0 if math.isfinite(value) else None


def _line(value: object) -> str:
    return json.dumps(value, ensure_ascii=False, allow_nan=False)
