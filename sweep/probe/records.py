"""What a probe finds: one finding a question, each with a verdict in words, figures with units, and what to do."""

from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Literal, get_args

from sweep.cameras import Facts
from sweep.choose.wording import number

Verdict = Literal["good", "not told", "take care", "not fit"]
VERDICTS: tuple[Verdict, ...] = get_args(Verdict)
"""From the best to the worst."""

Figures = dict[str, str | int | float | None]
Tell = Callable[[str, float], None]
"""What is told while the probe runs: what is looked at now, and the share of the work that is done."""


@dataclass(frozen=True, slots=True)
class Finding:
    """The answer to one question. `found` says it in words, `to_do` what follows, empty where nothing does.

    `hidden_by`: what keeps the question from being answered, where another finding names it.
    """

    code: str
    name: str
    verdict: Verdict
    found: str
    to_do: str = ""
    figures: Figures = field(default_factory=dict)
    hidden_by: str = ""


def hidden(code: str, name: str, by: str, figures: Figures | None = None) -> Finding:
    """A question that waits for another one's mending."""
    return Finding(code, name, "not told", f"hidden by {by}", f"Mend {by} first.", figures or {}, by)


@dataclass(frozen=True, slots=True)
class Probe:
    """All findings about one camera; `exposure_ms` and `tone` (of full scale) say at what light they were found."""

    device: Facts
    exposure_ms: float | None
    tone: float
    frames: int
    findings: tuple[Finding, ...]

    @property
    def verdict(self) -> Verdict:
        """Good where all is; else to take care, or not fit where one finding says so."""
        worst = max((finding.verdict for finding in self.findings), key=VERDICTS.index)
        return "take care" if worst == "not told" else worst


def percent(share: float) -> str:
    """A share in percent, to two digits."""
    return f"{number(float(f'{100 * share:.2g}'))} %" if share < 10 else "over 1000 %"
