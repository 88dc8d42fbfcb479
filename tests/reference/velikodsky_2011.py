"""Equigonal albedo of the Moon at 6° phase: highland, mare and average.

Source: Velikodsky et al. 2011, Icarus 214, 30 (figures by way of an open transcription of the paper's table).
"""

ALBEDO = {
    "Moon highland": {490: 0.1329, 607: 0.1638, 700: 0.1834, 747: 0.1917, 950: 0.2121, 1550: 0.3037},
    "Moon mare": {490: 0.0811, 607: 0.1005, 700: 0.1130, 747: 0.1184, 950: 0.1290, 1550: 0.1952},
    "Moon average": {490: 0.1106, 607: 0.1366, 700: 0.1531, 747: 0.1602, 950: 0.1764, 1550: 0.2571},
}
