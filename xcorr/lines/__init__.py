"""Line lists to absorption cross sections."""

from xcorr.lines.broadening import Broadening, default_broadening
from xcorr.lines.cross_section import cross_section, effective_cross_section, line_strength
from xcorr.lines.data import (
    CiaTable,
    LineList,
    MethaneTable,
    PartitionTable,
    TransmissionTable,
    load_cia,
    load_lines,
    load_methane,
    load_partition,
    load_transmission_table,
)
from xcorr.lines.partition import partition_sum

__all__ = [
    "Broadening",
    "CiaTable",
    "LineList",
    "MethaneTable",
    "PartitionTable",
    "TransmissionTable",
    "cross_section",
    "default_broadening",
    "effective_cross_section",
    "line_strength",
    "load_cia",
    "load_lines",
    "load_methane",
    "load_partition",
    "load_transmission_table",
    "partition_sum",
]
