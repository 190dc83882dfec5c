"""What one coding step can do for words of one length: figures for the profile's author."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray


@dataclass(frozen=True, slots=True)
class Strength:
    """The strength of a step.

    text      in words
    accepted  share of random words that the step's decoder or check lets pass
    exact     the share is exact, not an estimate
    warning   what the author should know; empty when all is well
    """

    text: str = ""
    accepted: float = 1.0
    exact: bool = True
    warning: str = ""


NOTHING = Strength()


@dataclass(frozen=True, slots=True)
class Codewords:
    """Where the codewords of a code lie in a word.

    codeword, symbol  int64 (bit,)  numbers of the codeword and of the symbol that each bit belongs to
    corrects          wrong symbols that are corrected in every codeword
    """

    codeword: NDArray[np.int64]
    symbol: NDArray[np.int64]
    corrects: int

    def longest_burst(self, place: NDArray[np.int64]) -> int:
        """Return the longest burst on the air that is surely corrected, wherever it begins.

        place  int64 (air bit,)  the bit of the word that each air bit carries, -1: none of it
        A burst of L bits is corrected when no codeword has more than t of its symbols in any L air bits in a row:
        for each codeword the shortest stretch that touches t + 1 symbols is sought.
        """
        air = np.flatnonzero(place >= 0)
        codeword, symbol = self.codeword[place[air]], self.symbol[place[air]]
        shortest = len(place) + 1
        for which in np.unique(codeword):
            mine = np.flatnonzero(codeword == which)
            at, of = air[mine], symbol[mine]
            count: dict[int, int] = {}
            left = 0
            for right in range(len(at)):
                count[int(of[right])] = count.get(int(of[right]), 0) + 1
                while len(count) > self.corrects:
                    shortest = min(shortest, int(at[right] - at[left]) + 1)
                    gone = int(of[left])
                    count[gone] -= 1
                    if not count[gone]:
                        del count[gone]
                    left += 1
        return shortest - 1
