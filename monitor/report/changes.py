"""What changed between two evenings of a round."""

from __future__ import annotations

from dataclasses import dataclass

from monitor.words import Standing
from monitor.world import Answer, Standings

LARGEST_MOVES = 6
SMALLEST_MOVE = 0.0005  # a twentieth of a point: less would print as 0.0


@dataclass(frozen=True)
class Turn:
    """A standing that is another one than the evening before; `was` None: the rule was not asked for this subject."""

    answer: Answer
    was: Standing | None


@dataclass(frozen=True)
class Move:
    """A change of utilisation between two evenings, as a fraction of the limit."""

    answer: Answer
    before: Answer
    change: float


@dataclass(frozen=True)
class Changes:
    """turns: worst standing first. asked, dropped: standings that are new within, and those no longer asked for."""

    turns: tuple[Turn, ...]
    asked: tuple[Answer, ...]
    dropped: tuple[Answer, ...]
    moves: tuple[Move, ...]

    def turned(self, standing: Standing) -> tuple[Turn, ...]:
        return tuple(turn for turn in self.turns if turn.answer.standing is standing)


def changes(before: Standings, tonight: Standings) -> Changes:
    """Compare rule by rule and subject by subject. A standing that is new counts as a turn unless it is within."""
    earlier = {_key(answer): answer for answer in before.answers}
    now = {_key(answer) for answer in tonight.answers}
    turns, asked, moves = [], [], []
    for answer in tonight.answers:
        old = earlier.get(_key(answer))
        if old is None and answer.standing is Standing.WITHIN:
            asked.append(answer)
        elif old is None or old.standing is not answer.standing:
            turns.append(Turn(answer, old.standing if old else None))
        if old and old.utilisation is not None and answer.utilisation is not None:
            moves.append(Move(answer, old, answer.utilisation - old.utilisation))
    moves = [move for move in moves if abs(move.change) >= SMALLEST_MOVE]
    moves.sort(key=lambda move: (-abs(move.change), _key(move.answer)))
    return Changes(
        turns=tuple(turns),
        asked=tuple(asked),
        dropped=tuple(answer for key, answer in earlier.items() if key not in now),
        moves=tuple(moves[:LARGEST_MOVES]),
    )


def _key(answer: Answer) -> tuple[str, str]:
    return (answer.rule, answer.subject.key)
