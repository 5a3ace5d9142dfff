"""The stages that read pixels for new positions: where bright sources are, and what is measured.

The first pass of a run and every second one go through the same calls.
"""

from __future__ import annotations

import logging
from collections.abc import Mapping, Sequence

from hindlight import plan, store, tasks
from hindlight.store import Columns
from hindlight.verdicts import Session

log = logging.getLogger("hindlight")


def bright_sources(
    session: Session, frames: Columns, within: Mapping[int, plan.FieldFrames]
) -> dict[int, plan.BrightSources]:
    """Sources that controls of each field must keep clear of, from its reference frames."""
    per_channel = session.order.settings.controls.reference_frames
    per_field = {number: plan.reference_frames(frames, here.rows, per_channel) for number, here in within.items()}
    wanted = sorted({int(row) for rows in per_field.values() for row in rows})
    session.watcher.stage("looking for bright sources", len(wanted))
    results: dict[int, plan.BrightSources] = {}

    def done(number: int, result: plan.BrightSources) -> None:
        results[wanted[number]] = result
        session.watcher.step()

    session.crew.run(tasks.find_bright, [(session.order, int(frames["id"][row])) for row in wanted], done)
    labels = frames["channel"]
    return {
        number: plan.joined([
            plan.persistent([results[int(row)] for row in rows if labels[row] == label])
            for label in sorted(set(labels[rows].tolist()))
        ])
        for number, rows in per_field.items()
    }  # fmt: skip


def measure(session: Session, pieces: Sequence[store.Piece], stage: str = "measuring") -> None:
    """Measure every piece that has no part yet."""
    todo = [piece for piece in pieces if not session.run.part(piece).is_file()]
    session.watcher.stage(stage, len(pieces))
    session.watcher.step(len(pieces) - len(todo))
    log.info("%s: %d of %d pieces to do", stage, len(todo), len(pieces))
    jobs = [(session.order, piece) for piece in todo]
    session.crew.run(tasks.measure_piece, jobs, lambda _n, _r: session.watcher.step())
