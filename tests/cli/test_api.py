"""The public names of the package, and how they behave."""

import subprocess
import sys
from pathlib import Path

import pcaptool
from pcaptool.audit.table import CAPTURES
from pcaptool.links.table import GAPS, INTERVALS, LINKS

DAY = Path(__file__).parents[2] / "fixtures" / "merrowdale"


def test_the_public_list_is_what_was_meant():
    assert pcaptool.__all__ == [
        "Audit", "CaptureError", "Options", "PcaptoolError", "Problem", "Profile", "ProfileError", "UsageError",
        "__version__", "audit", "load_profile", "read_datagrams", "shipped_profiles", "simulate"]
    for name in pcaptool.__all__:
        assert getattr(pcaptool, name) is not None


def test_folders_of_the_same_name_stay_importable():
    code = "import pcaptool.audit.run as r, pcaptool; from pcaptool.audit import Options; " \
           "print(callable(pcaptool.audit), r.__name__, callable(pcaptool.simulate))"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, timeout=60)
    assert done.stdout == "True pcaptool.audit.run True\n"


def test_tables_have_their_documented_columns():
    audit = pcaptool.audit(DAY, profile="merrowdale")
    for table, columns in ((audit.links, LINKS), (audit.gaps, GAPS), (audit.intervals, INTERVALS),
                           (audit.captures, CAPTURES)):
        assert list(table.columns) == [c.name for c in columns]
    frames = audit.frames
    assert len(frames) == audit.links["heard"].sum()
    assert frames["time"].is_monotonic_increasing
    assert str(frames["time"].dtype) == "datetime64[ns, UTC]"
    assert audit.errors["frame"].is_monotonic_increasing
    audit.close()


def test_sums_that_the_manual_promises():
    audit = pcaptool.audit(DAY, profile="merrowdale")
    links = audit.links.fillna(0)
    audit.close()
    assert (links["heard"] == links["intact"] + links["corrected"] + links["corrupted"] + links["short"]).all()
    assert (links["lost"] == links["lost_air"] + links["lost_backhaul"] + links["lost_undecided"]).all()
    usable = links["intact"] + links["corrected"] - links["repeated"]
    assert (links["sent"] == usable + links["corrupted"] + links["short"] + links["lost"]).all()


def test_datagrams_can_be_read_alone():
    n = sum(len(batch) for batch in pcaptool.read_datagrams(DAY / "day-01.pcap"))
    assert n > 5000
