"""Error control coding: steps as array to array. No files, no tables of frames, no options.

``STEPS`` names every coding step that a profile can use.
"""

from pcaptool.coding.bch import Bch
from pcaptool.coding.bit_order import BitOrder
from pcaptool.coding.bit_stuffing import BitStuffing
from pcaptool.coding.block_code import BlockCode
from pcaptool.coding.chain import Chain
from pcaptool.coding.checksum import Checksum
from pcaptool.coding.convolutional import Convolutional
from pcaptool.coding.crc import Crc
from pcaptool.coding.golay import Golay
from pcaptool.coding.hamming import Hamming
from pcaptool.coding.interleave import Interleave
from pcaptool.coding.length import Length
from pcaptool.coding.line_code import LineCode
from pcaptool.coding.pad import Pad
from pcaptool.coding.reed_solomon import ReedSolomon
from pcaptool.coding.repeat import Repeat
from pcaptool.coding.scramble import Scramble
from pcaptool.coding.step import Step
from pcaptool.coding.sync import Sync
from pcaptool.coding.whiten import Whiten

STEPS: dict[str, type[Step]] = {
    step.name: step
    for step in (Crc, Checksum, Hamming, BlockCode, Golay, Bch, ReedSolomon, Convolutional, Repeat, Interleave,
                 Whiten, Scramble, LineCode, BitStuffing, BitOrder, Sync, Length, Pad)
}

__all__ = ["STEPS", "Chain", "Step"]
