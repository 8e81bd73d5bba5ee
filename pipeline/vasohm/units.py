"""Conversions of units; the only place where a unit changes. Exact unless noted."""

M_PER_UM = 1e-6
UM_PER_MM = 1e3
MM_PER_M = 1e3
S_PER_MIN = 60.0
PA_S_PER_MPA_S = 1e-3
PA_PER_MMHG = 133.322387415  # conventional millimetre of mercury: 13595.1 kg/m3 x 9.80665 m/s2 x 1 mm
NL_MIN_PER_M3_S = 6e13  # 1 m3 = 1e12 nL, 1 min = 60 s
