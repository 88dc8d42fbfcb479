"""Benjamini & Hochberg 1995, J. R. Stat. Soc. B 57, 289, section 4.1: 15 ordered p-values, four rejected at 0.05."""

P_VALUES = (
    *(0.0001, 0.0004, 0.0019, 0.0095, 0.0201, 0.0278, 0.0298, 0.0344),
    *(0.0459, 0.3240, 0.4262, 0.5719, 0.6528, 0.7590, 1.0000),
)
REJECTED_AT_5_PERCENT = 4
REJECTED_BY_BONFERRONI = 3
