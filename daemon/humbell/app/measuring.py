"""The measures' task: blocks from all sources in, readings and transitions out, one thread for all of them."""

import time
from collections import defaultdict
from collections.abc import Callable, Iterable, Iterator, Sequence
from concurrent.futures import Future

import structlog

from humbell.alarms import AlarmState, Event
from humbell.app.board import Board
from humbell.app.chain import Chain
from humbell.app.intake import Intake
from humbell.app.keeper import Batch
from humbell.app.queues import BoundedQueue
from humbell.app.task import Task
from humbell.model import AlarmId, Block, ConfigError, Moment, Reading, Transition

_log = structlog.get_logger()
_TURN_S = 0.2
# A source may be away for so long (a broker restarts, a sender sends later what it has kept) before its seconds are
# given up as lost; what comes later still is refused as late.
SILENCE_S = 15.0
# From then on the loss is told this often.
_SILENCE_EVERY_S = 5.0


class Measuring:
    """
    Owns the chain.

    Args:
        chain: of all sources.

        blocks: what is to be measured.

        intakes: of the sources; those that stay silent are told as lost.

        give: takes what comes out, to be written; it does not wait.

        board: shows what is true now.

        now: the moment, by both clocks.
    """

    def __init__(
        self,
        chain: Chain,
        blocks: BoundedQueue[Block],
        intakes: Sequence[Intake],
        give: Callable[[Batch], None],
        board: Board,
        now: Callable[[], Moment],
    ) -> None:
        self._chain = chain
        self._blocks = blocks
        self._intakes = intakes
        self._give = give
        self._board = board
        self._now = now
        self._acts: BoundedQueue[tuple[AlarmId, Event, Future[Transition | None]]] = BoundedQueue("commands", 64)
        self._told_silent_ns: dict[str, int] = {}
        self._unusable_since_ns: dict[str, int] = {}
        self._ended: set[str] = set()
        self.unusable: dict[str, int] = defaultdict(int)
        self.troubles: dict[str, str] = {}
        self.measured_blocks = 0
        self.task = Task("measures", self._turn)

    def act(self, alarm: AlarmId, event: Event, timeout_s: float) -> Transition | None:
        """
        Do what a person asks, in the measures' own thread, and return the transition that it brought, if any.

        Raises:
            KeyError: there is no such alarm.

            TimeoutError: it was not done in time.
        """
        answer: Future[Transition | None] = Future()
        if not self._acts.put((alarm, event, answer), timeout_s):
            raise TimeoutError
        try:
            return answer.result(timeout_s)
        except TimeoutError:
            # Who was told that it was not done must not find it done later.
            answer.cancel()
            raise

    def finish(self) -> None:
        """Measure what still waits, once the task and all sources have ended."""
        while (block := self._blocks.get(0.0)) is not None:
            self._measure(block)
        for intake in self._intakes:
            for left in intake.rest():
                self._measure(left)
            self._hand_on(self._chain.end(intake.name))

    def _turn(self) -> bool:
        while (asked := self._acts.get(0.0)) is not None:
            self._do(*asked)
        block = self._blocks.get(_TURN_S)
        if block is not None:
            self._measure(block)
        self._look_for_silence()
        return True

    def _measure(self, block: Block) -> None:
        line = self._chain.lines[block.source]
        refused = line.refused_blocks
        try:
            self._hand_on(self._chain.feed(block))
        except ConfigError as error:
            self.unusable[block.source] += 1
            trouble = "; ".join(error.problems)
            self._unusable_since_ns.setdefault(block.source, time.monotonic_ns())
            if self.troubles.get(block.source) != trouble:
                _log.warning("blocks_unusable", source=block.source, trouble=trouble)
            self.troubles[block.source] = trouble
        else:
            self.measured_blocks += line.refused_blocks == refused
            for noted in (self.troubles, self._unusable_since_ns, self._told_silent_ns):
                noted.pop(block.source, None)

    def _look_for_silence(self) -> None:
        mono_ns = time.monotonic_ns()
        for intake in self._intakes:
            if intake.ended:
                if intake.name not in self._ended and self._blocks.state.length == 0:
                    self._ended.add(intake.name)
                    self._hand_on(self._chain.end(intake.name))
                continue
            told_ns = self._told_silent_ns.get(intake.name, 0)
            # Blocks that cannot be measured are as good as none.
            unusable_s = (mono_ns - self._unusable_since_ns.get(intake.name, mono_ns)) / 1e9
            if max(intake.silent_s, unusable_s) < SILENCE_S or mono_ns - told_ns < _SILENCE_EVERY_S * 1e9:
                continue
            if not told_ns and intake.silent_s >= SILENCE_S:
                _log.warning("source_silent", source=intake.name, since_s=round(intake.silent_s, 1))
            self._told_silent_ns[intake.name] = mono_ns
            self._hand_on(self._chain.silence(intake.name, self._now().utc_ns))

    def _do(self, alarm: AlarmId, event: Event, answer: "Future[Transition | None]") -> None:
        if not answer.set_running_or_notify_cancel():
            return
        try:
            transition = self._chain.book.act(alarm, event, self._now().utc_ns)
        except KeyError as error:
            answer.set_exception(error)
            return
        if transition is not None:
            self._hand_on([transition])
        answer.set_result(transition)

    def _hand_on(self, told: Iterable[Reading | Transition]) -> None:
        readings: list[Reading] = []
        transitions: list[tuple[Transition, AlarmState]] = []
        for one in told:
            if isinstance(one, Reading):
                readings.append(one)
            else:
                transitions.append((one, self._chain.book.states[one.alarm]))
        if not readings and not transitions:
            return
        states = dict(self._chain.book.states)
        for transition in _changes(transitions):
            _log.info(
                "transition",
                machine=transition.alarm.machine,
                point=transition.alarm.point,
                alarm=transition.alarm.name,
                before=transition.before,
                after=transition.after,
                value=transition.value,
                limit=transition.limit,
            )
        self._give(Batch(tuple(readings), tuple(transitions), states))
        self._board.show(tuple(readings), states)


def _changes(transitions: list[tuple[Transition, AlarmState]]) -> Iterator[Transition]:
    return (transition for transition, _ in transitions if transition.before is not transition.after)
