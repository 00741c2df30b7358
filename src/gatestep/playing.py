"""A plan at work: sweep after sweep, each begun by orders for the sample it is to begin with.

While one sweep plays, the next one's model is written to the spare bank and its stimulus
to the spare slot; then its orders go to the loop, which carries them out at their sample.
No boundary waits for this thread, unless a sweep is shorter than it takes to prepare the
next: then that one begins late, and the record says when it did. The last sweep's end
disarms the loop, and what was in force before the plan is put back.
"""

from __future__ import annotations

from collections.abc import Callable
from concurrent.futures import Executor, Future
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import numpy.typing as npt

from .config import LoadedRig
from .errors import ControlError, GatestepError
from .orderline import Record, model_meaning
from .orders import Order, Outcome
from .plans import Plan
from .shelf import Ready, Shelf
from .spikes import HYSTERESIS_MV
from .states import State
from .stimulus import waveform
from .sweepsettings import PreparedSweep, Setting
from .watch import LoopEvent, Watch
from .wire import CLIPPED, LATE, LIVE, NIL, REPEAT

LEAD_S = 0.1
"""Time from the request until the first sweep begins."""
MOST_TOLD = 200
"""Sweeps told in one answer."""


@dataclass
class _Played:
    """What is known of one sweep."""

    number: int
    start: int | None = None
    over: bool = False
    spikes: int = 0
    late: int = 0
    clipped: int = 0
    dead: int = 0  # answers that were not live
    samples: int = 0
    below: bool = False


@dataclass
class _Run:
    """A plan under way."""

    plan: Plan
    sweeps: list[PreparedSweep]
    before: list[Ready]
    forced: bool
    playing: dict[int, _Played] = field(default_factory=dict)  # by place in the plan
    done: list[dict[str, Any]] = field(default_factory=list)
    filling: Future[None] | None = None
    begins: int = 0  # the sample at which the sweep being prepared is to begin
    following: int = 0  # the sweep being prepared, or ordered
    ordered: bool = False
    swaps: dict[int, Ready] = field(default_factory=dict)  # by the number of their order
    lost: int = 0  # entries that the loop's log had lost when the plan began
    armed: bool = False
    arming: int = 0
    session: int = 0  # of the rig that holds the loop
    why: str | None = None  # it has ended
    restoring: bool = False  # what was in force before is ordered back
    restored: bool = False  # and it is in force


class Player:
    """Plays plans to the cells of one server.

    Parameters
    ----------
    rig : LoadedRig
    shelf : Shelf
    slots : ndarray (2, ticks)
        Where the loop reads stimuli.
    watch : Watch
    send : callable
        As :meth:`gatestep.orderline.OrderLine.send`.
    builder : Executor
        Where waveforms are made.
    record : Record
    in_force : callable
        Told of each cell whose model was changed.
    """

    def __init__(
        self,
        rig: LoadedRig,
        shelf: Shelf,
        slots: npt.NDArray[np.float64],
        watch: Watch,
        send: Callable[..., int],
        builder: Executor,
        record: Record,
        in_force: Callable[[int, Ready], None],
    ) -> None:
        self._rig, self._shelf, self._slots, self._watch = rig, shelf, slots, watch
        self._send, self._builder, self._record = send, builder, record
        self._in_force = in_force
        self._run: _Run | None = None
        self._last: _Run | None = None

    @property
    def busy(self) -> bool:
        """Whether a plan is under way, or what was in force before it is being put back."""
        return self._run is not None

    def begin(
        self, plan: Plan, sweeps: list[PreparedSweep], forced: bool, session: int
    ) -> dict[str, Any]:
        """Order the first sweep of a plan.

        ``session`` is that of the rig for which the plan was asked for.

        Raises
        ------
        ControlError
            When a plan runs already, or that rig is not there to play it to.
        """
        self.refuse_if_busy("run")
        seq = self._watch.seq
        if not self._watch.held or seq is None:
            raise ControlError("run: no rig holds the loop; start the rig, then run the plan")
        if self._watch.state == State.TRIPPED:
            fault = self._watch.summary()["fault"]
            raise ControlError(f"run: the loop has tripped ({fault}); mend that, then reset")
        if self._watch.session != session:
            raise ControlError("run: another rig has come meanwhile; run the plan again")
        before = [ready for ready in self._shelf.in_force if ready is not None]
        run = _Run(plan, sweeps, before, forced, session=session, lost=self._watch.records_lost)
        self._run, self._last = run, run
        run.begins = seq + max(1, round(LEAD_S * 1e6 / self._rig.spec.loop.interval_us))
        planned = plan.as_json([one.sweep for one in sweeps])
        self._record.note("plan", plan=planned, forced=forced)
        self._fill(run)
        total = sum(one.ticks + one.ramp_ticks + one.pause_ticks for one in sweeps)
        total -= sweeps[-1].pause_ticks
        return {
            "sweeps": len(sweeps),
            "title": plan.spec.title,
            "seconds": total * self._rig.spec.loop.interval_us * 1e-6,
        }

    def refuse_if_busy(self, verb: str) -> None:
        """Refuse what a plan under way does by itself.

        Raises
        ------
        ControlError
        """
        if self._run is not None:
            raise ControlError(
                f"{verb}: a plan is running; wait for its end, or end it with 'gatestep halt'"
            )

    def halt(self, why: str) -> None:
        """End the plan under way: stimulus off, 0 pA, the model before put back."""
        run = self._run
        if run is None or run.why is not None:
            return
        self._end(run, why)
        for place, played in sorted(run.playing.items()):
            if played.start is not None and not played.over:
                self._record.note("sweep_end", sweep=place, complete=False)
                run.done.append(self._told(run, place, played, complete=False))
        run.playing.clear()
        self._send(Order.CANCEL)
        self._send(Order.DISARM)

    def follow(self) -> None:
        """See to the plan under way; called every so often by the attending thread."""
        run = self._run
        if run is None:
            return
        try:
            if run.why is None:
                self._follow(run)
            else:
                self._restore(run)
        except GatestepError as fault:
            if run.why is None:
                self.halt(str(fault))
            else:
                self._give_up(run, str(fault))

    def _follow(self, run: _Run) -> None:
        if self._watch.session != run.session or not self._watch.held:
            self.halt("the rig let go of the loop")
        elif self._watch.records_lost > run.lost:
            self.halt("the loop's log overflowed")
        elif run.armed and self._watch.state != State.ARMED and not self._is_over(run):
            self.halt(self._why_not_armed())
        elif run.filling is not None and run.filling.done() and not run.ordered:
            self._order(run)

    def _why_not_armed(self) -> str:
        fault = self._watch.summary()["fault"]
        return f"the loop has tripped: {fault}" if fault else "the loop was disarmed"

    def confirm(self, event: LoopEvent) -> None:
        """Take in what the loop says of an order."""
        run = self._run
        if run is None:
            return
        if event.number in run.swaps:
            ready = run.swaps.pop(event.number)
            self._settle(ready, event.outcome == Outcome.DONE)
        elif run.why is not None:
            return
        elif event.number == run.arming and not run.armed:
            run.armed = event.outcome == Outcome.DONE
            if not run.armed:
                self.halt(f"the loop would not arm: {Outcome(event.outcome).name.lower()}")
        else:
            self._confirm_sweep(run, event)

    def _settle(self, ready: Ready, done: bool) -> None:
        """A swap has been carried out, or dropped: then nothing stands prepared."""
        cell = ready.bank // 2
        if done:
            self._shelf.put_in_force(cell)
            self._in_force(cell, ready)
        else:
            self._shelf.prepared[cell] = None

    def observe(self, samples: npt.NDArray[Any]) -> None:
        """Count spikes, late and clipped answers of the sweep under way."""
        run = self._run
        if run is None or run.why is not None or not run.playing:
            return
        fresh = samples[samples["flags"] & REPEAT == 0]
        for place, played in sorted(run.playing.items()):
            if played.start is None:
                continue
            one = run.sweeps[place]
            seq = fresh["seq"]
            mine = fresh[(seq >= played.start) & (seq < played.start + one.ticks)]
            _count(played, mine, one)
            if played.over:
                run.done.append(self._told(run, place, played, complete=played.dead == 0))
                del run.playing[place]
        if len(run.done) == len(run.sweeps):
            whole = all(told["complete"] for told in run.done)
            self._end(run, "complete" if whole else "a sweep was not live throughout")

    def status(self, since: int = 0) -> dict[str, Any] | None:
        """The plan under way, or the last one; with the sweeps ended since one of them."""
        run = self._last
        if run is None:
            return None
        now = [(k, p) for k, p in sorted(run.playing.items()) if p.start is not None]
        told: dict[str, Any] = {
            "title": run.plan.spec.title,
            "running": self._run is run,
            "sweeps": len(run.sweeps),
            "ended": len(run.done),
            "why": run.why,
            "restored": run.restored,
            "done": run.done[since : since + MOST_TOLD],
            "now": None,
        }
        if now:
            place, played = now[0]
            told["now"] = self._told(run, place, played, complete=None)
        return told

    def _fill(self, run: _Run) -> None:
        """Have the stimulus of the sweep to follow made in the spare slot."""
        one = run.sweeps[run.following]
        slot = self._slots[run.following % 2]
        interval_us = self._rig.spec.loop.interval_us

        def work() -> None:
            slot[: one.ticks] = waveform(one.sweep.stimulus, one.ticks, interval_us)

        run.ordered = False
        run.filling = self._builder.submit(work)

    def _order(self, run: _Run) -> None:
        """Order the sweep whose stimulus is ready."""
        place = run.following
        one = run.sweeps[place]
        if run.filling is not None and run.filling.exception() is not None:
            self.halt(f"sweep {one.sweep.name!r}: {run.filling.exception()}")
            return
        if run.swaps:
            return  # the spare bank is free once the loop has told of the last change
        run.ordered = True
        arming = place == 0 and self._watch.state != State.ARMED
        self._change(run, one, arming)
        if arming:
            run.arming = self._send(Order.ARM, at=run.begins, forced=run.forced)
        elif place == 0:
            run.armed = True
        number = self._send(
            Order.PLAY,
            one.cell,
            place % 2,
            float(one.ticks),
            at=run.begins + one.ramp_ticks,
            event="sweep_start",
            sweep=place,
            **{k: v for k, v in one.sweep.as_json().items() if k not in {"index", "cell", "ticks"}},
        )
        run.playing[place] = _Played(number)

    def _change(self, run: _Run, one: PreparedSweep, arming: bool) -> None:
        """Order the model and parameters of a sweep, where they are not in force.

        Where the loop is armed with it, a conductance that comes gradually starts from none.
        """
        ready = self._shelf.in_force[one.cell]
        assert ready is not None, "every cell has a model in force"
        setting = one.setting
        from_zero = arming and one.ramp_ticks > 0
        if from_zero or not setting.is_in_force(ready):
            ramp = one.ramp_ticks, from_zero
            self._swap(run, one.cell, setting, setting.goes_on(ready), run.begins, ramp)

    def _swap(
        self,
        run: _Run,
        cell: int,
        setting: Setting | Ready,
        goes_on: bool,
        at: int,
        ramp: tuple[int, bool] = (0, False),
    ) -> None:
        """Prepare a model in the spare bank, and order it in force."""
        ready = self._shelf.prepare(cell, setting.model, setting.tables, setting.choice)
        number = self._send(
            Order.SWAP,
            cell,
            ready.bank,
            float(goes_on),
            setting.choice,
            at,
            ramp,
            goes_on=goes_on,
            **model_meaning(ready, self._record),
        )
        run.swaps[number] = ready

    def _confirm_sweep(self, run: _Run, event: LoopEvent) -> None:
        for place, played in run.playing.items():
            if played.number != event.number:
                continue
            if event.text == Order.REST.name.lower():
                played.over = True
            elif event.outcome != Outcome.DONE:
                self.halt("the rig let go of the loop")
            elif event.seq is not None:
                self._begun(run, place, played, event.seq)
            return

    def _begun(self, run: _Run, place: int, played: _Played, seq: int) -> None:
        """A sweep has begun: its end is known, and with it when the next one begins."""
        played.start = seq
        one = run.sweeps[place]
        end = seq + one.ticks
        if place + 1 == len(run.sweeps):
            self._send(Order.DISARM, at=end)
            return
        run.following = place + 1
        run.begins = end + one.pause_ticks
        self._fill(run)

    def _is_over(self, run: _Run) -> bool:
        """Whether the last sweep has ended, and only its account is missing."""
        last = run.playing.get(len(run.sweeps) - 1)
        return last is not None and last.over

    def _end(self, run: _Run, why: str) -> None:
        run.why = why
        self._record.note("plan_end", why=why, ended=len(run.done))

    def _restore(self, run: _Run) -> None:
        """Put back what was in force before the plan, once the loop has told of every swap."""
        if run.swaps and self._watch.records_lost > run.lost:
            # What the log lost, the loop's own record still tells.
            for swapped in run.swaps.values():
                self._settle(swapped, self._watch.bank(swapped.bank // 2) == swapped.bank)
            run.swaps.clear()
        if run.swaps:
            return
        if run.restoring:
            run.restored = True
            self._run = None
            return
        run.restoring = True
        for cell, before in enumerate(run.before):
            ready = self._shelf.in_force[cell]
            assert ready is not None, "every cell has a model in force"
            if ready.bank != before.bank or ready.tables is not before.tables:
                self._swap(run, cell, before, False, int(NIL))

    def _give_up(self, run: _Run, reason: str) -> None:
        """The model before cannot be put back: that is told, and the plan's stays."""
        run.why = f"{run.why}; the model before could not be put back: {reason}"
        self._record.note("advice", text=run.why)
        self._run = None

    def _told(
        self, run: _Run, place: int, played: _Played, complete: bool | None
    ) -> dict[str, Any]:
        one = run.sweeps[place]
        return {
            "sweep": place,
            "name": one.sweep.name,
            "condition": one.sweep.condition,
            "current_pa": one.sweep.step["current_pa"] if one.sweep.step else None,
            "start": played.start,
            "ticks": one.ticks,
            "ticks_done": played.samples,
            "spikes": played.spikes,
            "late": played.late,
            "clipped": played.clipped,
            "complete": complete,
        }


def _count(played: _Played, samples: npt.NDArray[Any], one: PreparedSweep) -> None:
    """Take a stretch of a sweep's samples into its counts."""
    if not len(samples):
        return
    flags = samples["flags"]
    played.late += int(np.count_nonzero(flags & LATE))
    played.clipped += int(np.count_nonzero(flags & CLIPPED))
    played.dead += int(np.count_nonzero(flags & LIVE == 0))
    played.samples = int(samples["seq"][-1]) - (played.start or 0) + 1
    v_mv, threshold = samples["v_mv"][:, one.cell], one.sweep.threshold_mv
    up, down = v_mv >= threshold, v_mv < threshold - HYSTERESIS_MV
    met = np.flatnonzero(up | down)
    if not len(met):
        return
    above = up[met]
    was_below = np.concatenate(([played.below], ~above[:-1]))
    played.spikes += int(np.count_nonzero(above & was_below))
    played.below = bool(~above[-1])
