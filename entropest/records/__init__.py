"""What a laboratory hands over, turned into counts."""

from entropest.records.counts import DiagramCounts
from entropest.records.files import read_record, write_record
from entropest.records.moment_counts import MomentCounts
from entropest.records.two_copy import JointSwapCounts, TwoCopyShots

__all__ = ["DiagramCounts", "JointSwapCounts", "MomentCounts", "TwoCopyShots", "read_record", "write_record"]
