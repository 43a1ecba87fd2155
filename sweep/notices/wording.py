"""How notices name stops and lists."""

from collections.abc import Iterable


def mark(stop: float) -> str:
    """A stop as its mark reads."""
    return f"f/{stop:g}"


def listed(names: Iterable[str]) -> str:
    """Names as people list them: a, b and c; the tail of a long list is counted."""
    items = list(dict.fromkeys(names))
    if len(items) > 4:
        items = [*items[:3], f"{len(items) - 3} more"]
    return items[0] if len(items) == 1 else ", ".join(items[:-1]) + " and " + items[-1]
