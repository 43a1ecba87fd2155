"""The guided run at the station: a generator of events from a camera, a recording and a station.

Screens consume the events and answer each with an action; the run knows no screen. Time is that of the frames'
arrival. The order is the trade's own (common practice, no source): widest stop first, always turning one way, so
that the ring's play does no harm; darks last, since the cap goes on then.
"""

from sweep.capture.events import (
    Action,
    Ask,
    Begin,
    Event,
    Exposed,
    Finished,
    Score,
    Seen,
    Show,
    StepDone,
    Taken,
    Trouble,
)
from sweep.capture.live import Live
from sweep.capture.run import Keeper, Plan, guided_run
from sweep.station import Station

__all__ = [
    "Action",
    "Ask",
    "Begin",
    "Event",
    "Exposed",
    "Finished",
    "Keeper",
    "Live",
    "Plan",
    "Score",
    "Seen",
    "Show",
    "StepDone",
    "Taken",
    "Trouble",
    "conduct",
    "guided_run",
]


def conduct(live: Live, keeper: Keeper, station: Station, plan: Plan, show: Show) -> Finished:
    """Run to the end: show each event, and hand the answer back."""
    run = guided_run(live, keeper, station, plan)
    event = next(run)
    while not isinstance(event, Finished):
        event = run.send(show(event))
    show(event)
    return event
