"""The text and the document of `roa status`."""

from __future__ import annotations

from datetime import timedelta
from typing import Any

import numpy as np

from roa.basin.share import Share
from roa.report.wording import confidence_text, interval_percent, percent
from roa.sweep.status import Status

STATES = {
    "running": "running",
    "stopped": "stopped, resumable",
    "failed": "failed, resumable",
    "dead": "dead: its process vanished; resumable",
    "done": "done",
}


def status_document(status: Status, confidence: float) -> dict[str, Any]:
    """How far the sweep is, as plain values."""
    return {
        "state": status.state,
        "phase": status.phase,
        "done": status.done,
        "samples": status.samples,
        "share_done": status.done / status.samples if status.samples else 1.0,
        "rate": status.rate,
        "seconds_left": status.left,
        "outcomes": {word: _outcome(status, word, confidence) for word in status.counts},
        "confidence": confidence,
        "counted": _counted(status),
        "memory": status.memory,
        "owner": status.owner,
        "updated": status.updated,
        "age": status.age,
        "last": status.last,
        "fingerprint": status.header.fingerprint,
        "strength": "simulated",
    }


def status_text(status: Status, confidence: float, folder: str, resume: str) -> str:
    """How far the sweep is, for people."""
    share = status.done / status.samples if status.samples else 1.0
    where = f" (process {status.owner['pid']} on {status.owner['host']})" if status.owner else ""
    lines = [
        f"{folder}: {STATES[status.state]}{where}",
        f"  {status.done:,} of {status.samples:,} starts are stored ({share:.1%})",
    ]
    if status.state == "running":
        lines[0] += f", {status.phase}" if status.phase else ""
        if status.rate:
            lines.append(f"  {status.rate:,.0f} new starts a second, {_duration(status.left or 0.0)} left (estimated)")
    if status.memory:
        lines.append(
            f"  memory {status.memory['now'] / 1e9:.2f} GB, at most {status.memory['peak'] / 1e9:.2f} GB so far"
        )
    if status.updated and status.state != "done":
        lines.append(f"  last sign of life {status.updated}, {_duration(max(status.age or 0.0, 0.0))} ago")
    if status.last and status.state in ("stopped", "failed"):
        lines.append(f"  {status.last}")
    lines += _outcomes(status, confidence)
    if status.state in ("stopped", "failed", "dead"):
        lines.append(f"Carry on with `{resume}`")
    return "\n".join(lines) + "\n"


def _outcomes(status: Status, confidence: float) -> list[str]:
    counted = _counted(status)
    if not counted:
        return []
    lines = [f"  outcomes of {counted:,} starts, {confidence_text(confidence)} intervals (simulated)"]
    for word in status.counts:
        one = _outcome(status, word, confidence)
        if one["count"]:
            interval = interval_percent(*one["interval"])
            lines.append(
                f"    {word.replace('_', ' '):<20}{one['count']:>16,}   {percent(one['share'], 2)} ({interval})"
            )
    if status.done < status.samples:
        lines.append("    Before the end this is no fair sample: quick blocks end first.")
    return lines


def _outcome(status: Status, word: str, confidence: float) -> dict[str, Any]:
    """Count, share and interval of one outcome among the finished starts."""
    hits = np.array(status.counts[word])
    share = Share(status.header.design, len(hits))
    share.hits = hits
    share.sizes = np.sum(list(status.counts.values()), axis=0)
    if not share.samples or status.header.design == "grid":  # the interval of a grid needs every answer
        return {"count": int(hits.sum()), "share": share.fraction, "interval": [0.0, 1.0]}
    interval = share.interval(len(status.header.states), confidence)
    return {"count": int(hits.sum()), "share": share.fraction, "interval": [interval.low, interval.high]}


def _counted(status: Status) -> int:
    return int(np.sum(list(status.counts.values()))) if status.counts else 0


def _duration(seconds: float) -> str:
    return str(timedelta(seconds=round(seconds)))
