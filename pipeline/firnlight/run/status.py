"""What ran, what waits, what was refused or failed, and what mends it?"""

from __future__ import annotations

import datetime as dt
from dataclasses import dataclass
from pathlib import Path

from firnlight.core.settings import Workflow
from firnlight.run.ledger import Ledger, Refusal
from firnlight.run.night import plan_night
from firnlight.run.plan import Decision, Span
from firnlight.run.store import BUDGET, Store


@dataclass(frozen=True)
class StoreStatus:
    """The state of a store against the scenes that are there now."""

    workflow: Path
    runs: list[tuple[object, ...]]
    decisions: list[Decision]
    refusals: list[Refusal]
    orphans: list[tuple[str, dt.date]]  # tile-days with totals and no scene that can be used now

    @property
    def waiting(self) -> list[Decision]:
        return [one for one in self.decisions if one.job is not None]

    def retry(self, refusal: Refusal) -> str:
        """The command that tries just this again, once it is mended."""
        if refusal.day is None or refusal.tile is None:
            return f"firnlight night {self.workflow}"
        return f"firnlight night {self.workflow} --since {refusal.day} --until {refusal.day} --tile {refusal.tile}"

    def data(self) -> dict[str, object]:
        names = ("started", "finished", "made", "already", "refused", "failed", "exit_code")
        return {
            "version": 1,
            "runs": [dict(zip(names, run, strict=True)) for run in self.runs],
            "done": [f"{one.tile} {one.day}" for one in self.decisions if one.what == "done"],
            "kept_without_scene": [f"{tile} {day}" for tile, day in self.orphans],
            "waiting": [{"tile": one.tile, "day": one.day.isoformat(), "reason": one.reason} for one in self.waiting],
            "refused": [
                {"input": one.subject, "reason": one.reason, "since": one.since, "retry": self.retry(one)}
                for one in self.refusals
            ],
        }  # fmt: skip

    def text(self, only_failed: bool, only_waiting: bool) -> str:
        lines = []
        if not only_failed and not only_waiting:
            lines.append(f"Up to date: {sum(one.what == 'done' for one in self.decisions)} tile-days.")
            if self.runs:
                started, finished, made, already, refused, failed, code = self.runs[0]
                end = f"finished {finished}, exit code {code}" if finished else "did not finish"
                lines.append(
                    f"Last run: started {started}, {end}: {made or 0} made, {already or 0} already up to date, "
                    f"{refused or 0} refused, {failed or 0} failed."
                )
            else:
                lines.append("No run yet.")
            if self.orphans:
                lines.append(
                    f"Kept, though no scene of theirs can be used now: {len(self.orphans)} tile-days, still counted."
                )
                lines += [f"  {day} {tile}" for tile, day in self.orphans]
        if not only_failed:
            lines.append(f"Waits: {len(self.waiting)} tile-days.")
            lines += [f"  {one.day} {one.tile}: {one.reason}" for one in self.waiting]
        if not only_waiting:
            lines.append(f"Refused or failed: {len(self.refusals)}.")
            for one in self.refusals:
                lines += [f"  {one.reason}", f"  Then: {self.retry(one)}"]
        return "\n".join(lines)


def store_status(workflow: Workflow, path: Path) -> StoreStatus:
    """Look at the ledger and at the scenes that are there; writes nothing."""
    decisions, refusals = plan_night(workflow, Span())
    ledger = Ledger(Store(workflow.path(workflow.store.path)).ledger, read_only=True)
    try:
        known = {one.subject: one for one in ledger.refusals()}
        now = {one.subject: known.get(one.subject, one) for one in refusals}
        # what a night found only while reading stays refused until that tile-day is made
        left = {(one.tile, one.day) for one in decisions if one.what != "done"}
        late = {s: r for s, r in known.items() if s not in now and (r.tile, r.day) in left}
        held = {(tile, day) for tile, day, name in ledger.products() if name == BUDGET}
        usable = {(one.tile, one.day) for one in decisions if one.what in ("done", "make")}
        orphans = sorted(held - usable, key=lambda entry: (entry[1], entry[0]))
        return StoreStatus(path, ledger.runs(), decisions, [*now.values(), *late.values()], orphans)
    finally:
        ledger.close()
