"""Constants of units. Inside everything is SI; shop units live at the edges."""

from __future__ import annotations

ZERO_C_K = 273.15
#: Reference temperature of enthalpies, K.
T_REF_K = 298.15
#: Molar gas constant, J/(mol K): exact since the SI of 2019.
R_J_MOL_K = 8.31446261815324
ATM_PA = 101325.0
#: mol in one Nm3 (0 °C, 101.325 kPa, ideal gas).
NM3_MOL = ATM_PA / (R_J_MOL_K * ZERO_C_K)
MJ = 1e6
#: One short ton (2000 lb of 0.45359237 kg) in kg.
KG_PER_SHORT_TON = 907.18474
#: Standard cubic feet (60 °F, 101.325 kPa) in one Nm3: ideal gas, 1 ft = 0.3048 m.
SCF_PER_NM3 = (288.70555555555556 / ZERO_C_K) / 0.3048**3
