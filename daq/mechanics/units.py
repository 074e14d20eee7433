"""Exact unit factors, for questions and reports. midspan offers a conversion; it never makes one silently."""

from __future__ import annotations

N_PER_KGF = 9.80665
N_PER_LBF = 4.4482216152605
MPA_PER_PSI = 6.894757293168361e-3
MM_PER_INCH = 25.4
