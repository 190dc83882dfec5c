"""What a chain can do: computed figures against exhaustive trials, random words, and the standards' figures."""

from dataclasses import replace

import numpy as np
import pytest
from click.testing import CliRunner

from pcaptool.cli import cli
from pcaptool.coding.bch import Bch
from pcaptool.coding.block_code import BlockCode
from pcaptool.coding.chain import Chain
from pcaptool.coding.checksum import Checksum
from pcaptool.coding.crc import Crc
from pcaptool.coding.golay import Golay
from pcaptool.coding.hamming import Hamming
from pcaptool.coding.interleave import Interleave
from pcaptool.coding.length import Length
from pcaptool.coding.line_code import LineCode
from pcaptool.coding.pad import Pad
from pcaptool.coding.reed_solomon import ReedSolomon
from pcaptool.coding.repeat import Repeat
from pcaptool.coding.step import OK
from pcaptool.coding.sync import Sync
from pcaptool.coding.whiten import Whiten
from pcaptool.problem import ProfileError
from pcaptool.profile import load_profile, parse_profile
from pcaptool.profile.strength import chain_strength, strengths

CRC_4 = Crc(width=4, poly=3)
CHAINS = [
    (Chain((CRC_4,)), 9),
    (Chain((CRC_4, Hamming(n=7, k=4))), 12),
    (Chain((Crc(width=3, poly=3), Hamming(n=12, k=8), Interleave(rows=2, columns=12), Pad(bits=4))), 13),
    (Chain((Golay(n=24),)), 24),
    (Chain((Bch(n=16, k=7, extended=True), LineCode(kind="nrzi"))), 14),
    (Chain((BlockCode(generator=("10110", "01011")), Whiten(sequence="A5"))), 6),
    (Chain((ReedSolomon(n=7, k=5, m=3), Sync(word="0b1110010", tolerate=1))), 15),
    (Chain((Checksum(kind="even-parity", every_bits=7), Repeat(times=3))), 14),
    (Chain((Repeat(times=4),)), 3),
    (Chain((Length(bits=4, unit=1), CRC_4)), 9),
]


@pytest.mark.parametrize(("chain", "k"), CHAINS, ids=lambda c: "+".join(s.name for s in c.steps) if isinstance(c, Chain)
                         else "")
def test_random_words_are_accepted_as_often_as_computed(chain, k):
    s = chain_strength(chain, k)
    assert s.exact
    words = np.random.default_rng(k).integers(0, 2, (40_000, s.air_bits), np.uint8)
    share, p = (chain.decode(words).reason == OK).mean(), s.accepted
    assert abs(share - p) < 4.5 * np.sqrt(p * (1 - p) / len(words)) + 1e-12


BURSTS = [
    (Chain((Hamming(n=7, k=4), Interleave(rows=6, columns=7))), 24),
    (Chain((Golay(n=23), Interleave(rows=3, columns=23), LineCode(kind="manchester"))), 36),
    (Chain((ReedSolomon(n=15, k=11, m=4, depth=2), Whiten(sequence="3C"))), 88),
    (Chain((Repeat(times=3, order="word"),)), 5),
    (Chain((Crc(width=8, poly=7), Bch(n=15, k=7), Interleave(order=(3, 0, 4, 1, 2)))), 13),
]


@pytest.mark.parametrize(("chain", "k"), BURSTS, ids=lambda c: "+".join(s.name for s in c.steps) if isinstance(c, Chain)
                         else "")
def test_every_burst_of_that_length_is_corrected_and_some_longer_one_is_not(chain, k):
    """All bits of the burst wrong, and random bits of it wrong, at every place of the frame."""
    burst = chain_strength(chain, k).burst
    rng = np.random.default_rng(1)
    message = rng.integers(0, 2, (1, k), np.uint8)
    air = chain.encode(message)
    n = air.shape[1]

    def survived(length):
        came = []
        for begin in range(n - length + 1):
            for wrong in (np.ones(length), *(rng.integers(0, 2, (30, length)))):
                word = air[0].copy()
                word[begin : begin + length] ^= wrong.astype(np.uint8)
                came.append(word)
        out = chain.decode(np.array(came))
        return (out.reason == OK) & (out.message[:, :k] == message).all(axis=1)

    assert survived(burst).all()
    assert not survived(burst + 1).all()


def test_the_longest_burst_of_interleaved_codewords_is_that_of_the_standard():
    """CCSDS 130.1-G: depth times 16 symbols are corrected; a burst of bits may begin within one."""
    step = ReedSolomon(n=255, k=223, depth=5)
    assert chain_strength(Chain((step,)), step.k * 5 * 8).burst == (5 * 16 - 1) * 8 + 1


def test_fixed_fields_count():
    profile = load_profile("ccsds-tc")
    s = strengths(profile)[0]
    without = chain_strength(profile.chain, s.message_bits)
    assert s.accepted == pytest.approx(without.accepted / 4)


def test_profile_check_prints_the_strength_in_80_columns():
    out = CliRunner().invoke(cli, ["profile", "check", "merrowdale", "ccsds-tm", "ieee-1815"])
    assert out.exit_code == 0
    assert all(len(line) <= 80 for line in out.output.splitlines())
    assert "64 message bits become 120 on the air, rate 0.533" in out.output
    assert "of up to 633 bits on the air are surely corrected" in out.output
    assert "distance 6 at 136 bits" in out.output           # IEEE 1815: 16 octets and their CRC


def test_a_generator_that_lacks_its_constant_term_is_a_warning_not_an_error(tmp_path):
    text = load_profile("merrowdale").text
    begin = text.index('standard')
    end = text.index("\n", begin)
    weak = text[:begin] + "width = 16\npoly = 0x8408" + text[end:]
    weak = weak[: weak.index("[[example]]")]
    path = tmp_path / "weak.toml"
    path.write_text(weak)
    out = CliRunner().invoke(cli, ["profile", "check", str(path)])
    assert out.exit_code == 0
    assert "lacks its +1 term and is a CRC of 13 bits" in out.stderr


IMPOSSIBLE = [
    '''
[[coding]]
step = "reed_solomon"
n = 255
k = 223
[[coding]]
step = "bch"
n = 31
k = 21
''',      # 2040 bits are no whole number of words of 21
    '''
[[coding]]
step = "golay"
n = 23
[[coding]]
step = "interleave"
rows = 8
columns = 8
[[coding]]
step = "line_code"
kind = "three_of_six"
[[coding]]
step = "reed_solomon"
n = 15
k = 11
m = 4
''',      # 44 bits come of no whole number of six-bit symbols
    '''
[[coding]]
step = "line_code"
kind = "manchester"
[[coding]]
step = "reed_solomon"
n = 7
k = 3
m = 3
''',      # 9 bits are odd
]


@pytest.mark.parametrize("steps", IMPOSSIBLE)
def test_steps_that_fit_no_message_are_found_with_the_arithmetic(steps):
    text = ('format = 1\nname = "t"\ntitle = "t"\nbasis = "invented"\n[carrier]\nport = [5000]\n' + steps
            + '\n[message]\nfields = [ { name = "unit", bits = 8 } ]\n[link]\nby = ["unit"]\n')
    with pytest.raises(ProfileError) as caught:
        parse_profile(text.encode(), "t.toml")
    problem = caught.value.problems[0]
    assert problem.place == "coding" and "8 message bits:" in problem.fix


def test_a_chain_is_a_value():
    chain = load_profile("merrowdale").chain
    assert replace(chain, steps=chain.steps) == chain
