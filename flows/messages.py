"""What Prefect is told of a night that ended: log lines, an artifact, events.

Belongs here: their names and forms. Does not belong here: what a night came to (`outcome.py`). Nothing here may
fail a night: what cannot be sent is a note.
"""

from collections.abc import Callable
from pathlib import Path

from prefect.artifacts import MarkdownArtifact
from prefect.events import emit_event
from prefect.logging import get_run_logger

from flows.exits import Exit
from flows.outcome import Outcome

ARTIFACT_KEY = "ropewalk-night"
HELD_BACK_EVENT = "ropewalk.held-back"
_STOPPED = (Exit.INTERRUPTED, Exit.TERMINATED)


def event_name(outcome: Outcome) -> str:
    """The event of a run: `ropewalk.published`, also where markets were held back; `ropewalk.nothing-new`;
    `ropewalk.failed`; `ropewalk.dry-run`."""
    if outcome.summary is not None and outcome.summary.is_dry:
        return "ropewalk.dry-run"
    return f"ropewalk.{'published' if outcome.word == 'held back' else outcome.word.replace(' ', '-')}"


def send_outcome(outcome: Outcome, store: Path) -> list[str]:
    """Log, emit and keep what a night came to, within its flow run; returns what could not be sent, in words."""
    steps: list[tuple[str, Callable[[], None]]] = [
        ("log lines", lambda: _log(outcome)),
        ("events", lambda: _emit(outcome, store)),
    ]
    if outcome.exit_code not in _STOPPED:
        steps.append(("the artifact", lambda: _keep(outcome)))
    notes = []
    for what, step in steps:
        try:
            step()
        except Exception as error:  # whatever Prefect cannot take, the night stands as it ended
            said = (str(error) or type(error).__name__).splitlines()[0]
            notes.append(f"Prefect did not take {what} of the night ({said}); last_night.json in the store has it all")
    return notes


def _log(outcome: Outcome) -> None:
    logger = get_run_logger()
    for line in outcome.lines():
        (logger.info if outcome.summary is not None else logger.error)(line)


def _emit(outcome: Outcome, store: Path) -> None:
    place = {"prefect.resource.id": f"ropewalk.store:{store}", "prefect.resource.name": str(store)}
    emit_event(event_name(outcome), place, payload=outcome.as_json())
    if outcome.summary is None or outcome.summary.nothing_new:
        return
    for market, reason in outcome.summary.held_back:
        emit_event(
            HELD_BACK_EVENT,
            {"prefect.resource.id": f"ropewalk.market.{market}", "prefect.resource.name": market},
            related=[{**place, "prefect.resource.role": "store"}],
            payload={"market": market, "reason": reason, "snapshot": outcome.summary.snapshot},
        )


def _keep(outcome: Outcome) -> None:
    made = MarkdownArtifact(key=ARTIFACT_KEY, description=outcome.lines()[0][:500], markdown=outcome.as_markdown())
    made.create(_sync=True)  # type: ignore[call-arg]
