"""Lunar soil 62231, bidirectional reflectance at i = 30°, e = 0°, relative to a white standard.

Source: Pieters 1999, New Views of the Moon II, abstract 8025 (RELAB archive, Brown University).
"""

REFLECTANCE = {
    415: 0.10796, 480: 0.12562, 600: 0.15204, 640: 0.15981, 650: 0.16168, 700: 0.17002, 750: 0.17715,
    830: 0.18566, 900: 0.18938, 950: 0.19390, 1000: 0.20017, 1065: 0.21000, 1250: 0.23534, 1500: 0.26563,
    1535: 0.26907, 1550: 0.27088,
}  # fmt: skip
