"""What became of each row before any engine saw it."""

from dataclasses import dataclass, field

import numpy as np

from stellerg.observables import OBSERVABLES
from stellerg.status import Status

__all__ = ["Notes"]


@dataclass
class Notes:
    """What became of each row before any engine saw it.

    Attributes
    ----------
    status : ndarray of uint8, (star,)
    reason : ndarray of int32, (star,)
        Index into `sentences`; 0 is the empty sentence.
    culprit : ndarray of int16, (star,)
        Index of the observable at fault in the order of `OBSERVABLES`; -1 if there is none.
    flags : ndarray of int64, (star,)
        Bit mask of `Flag`.
    aside : ndarray of int16, (star,)
        Index into `aside_sets`.
    """

    status: np.ndarray
    reason: np.ndarray
    culprit: np.ndarray
    flags: np.ndarray
    aside: np.ndarray
    sentences: list[str] = field(default_factory=lambda: [""])
    aside_sets: list[tuple[str, ...]] = field(default_factory=lambda: [()])

    @classmethod
    def empty(cls, count: int) -> "Notes":
        """Notes of rows about which nothing is known yet."""
        return cls(
            np.zeros(count, np.uint8),
            np.zeros(count, np.int32),
            np.full(count, -1, np.int16),
            np.zeros(count, np.int64),
            np.zeros(count, np.int16),
        )

    def set(self, rows: np.ndarray, status: Status, sentence: str, culprit: str = "") -> None:
        """Give rows a status with its sentence."""
        if not len(rows):
            return
        self.status[rows] = status
        self.reason[rows] = self._number(sentence)
        self.culprit[rows] = list(OBSERVABLES).index(culprit) if culprit else -1

    def add(self, rows: np.ndarray, status: Status, sentence: str) -> None:
        """Give rows a status, and its sentence after the one they have."""
        for code in np.unique(self.reason[rows]):
            some = rows[self.reason[rows] == code]
            joined = f"{self.sentences[code]}; {sentence}" if code else sentence
            self.status[some] = status
            self.reason[some] = self._number(joined)

    def _number(self, sentence: str) -> int:
        if sentence not in self.sentences:
            self.sentences.append(sentence)
        return self.sentences.index(sentence)
