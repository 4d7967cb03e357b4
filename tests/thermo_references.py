"""Where the reference data of the enthalpy tests lie, and how they are read.

NIST-JANAF tables (M.W. Chase, 4th ed., J. Phys. Chem. Ref. Data Monograph 9, 1998) as carried
by the package `janaf`; NASA polynomials (B.J. McBride, S. Gordon, M.A. Reno, NASA TM-4513,
1993) as carried by the package `cantera`.
"""

from __future__ import annotations

from functools import cache

import numpy as np

#: Species -> number of its JANAF table over all phases (for P4O10 the crystal).
JANAF_TABLES = {
    "O2": "O-029",
    "N2": "N-023",
    "Ar": "Ar-001",
    "H2": "H-050",
    "CO": "C-093",
    "CO2": "C-095",
    "SO2": "O-034",
    "SO3": "O-058",
    "S2": "S-012",
    "P2": "P-012",
    "C": "C-002",
    "Si": "Si-001",
    "Fe": "Fe-003",
    "Cr": "Cr-001",
    "V": "V-001",
    "Ti": "Ti-001",
    "Al": "Al-001",
    "Ni": "Ni-001",
    "Cu": "Cu-001",
    "Mo": "Mo-001",
    "Nb": "Nb-001",
    "Mg": "Mg-001",
    "Ca": "Ca-001",
    "Ba": "Ba-001",
    "Na": "Na-001",
    "K": "K-001",
    "B": "B-001",
    "Zn": "Zn-001",
    "Pb": "Pb-001",
    "S": "S-001",
    "P": "P-001",
    "Mn": "Mn-001",
    "Co": "Co-001",
    "W": "W-001",
    "FeO": "Fe-020",
    "Fe0.947O": "Fe-001",
    "Fe3O4": "Fe-032",
    "Fe2O3": "Fe-030",
    "SiO2": "O-039",
    "CaO": "Ca-029",
    "MgO": "Mg-010",
    "Al2O3": "Al-101",
    "TiO2": "O-045",
    "V2O3": "O-064",
    "V2O5": "O-086",
    "Cr2O3": "Cr-016",
    "P4O10": "O-094",
    "Na2O": "Na-014",
    "K2O": "K-012",
    "BaO": "Ba-036",
    "PbO": "O-008",
    "MgCO3": "C-079",
    "Na2CO3": "C-092",
    "Ca(OH)2": "Ca-020",
    "Mg(OH)2": "H-057",
    "CaF2": "Ca-016",
    "CaS": "Ca-031",
    "FeS": "Fe-025",
    "SiC": "C-101",
    "Mg2SiO4": "Mg-030",
    "MgSiO3": "Mg-014",
    "MgAl2O4": "Al-091",
    "Al6Si2O13": "Al-112",
    "H2O": "H-064",
    "H2O_liquid": "H-063",
}

#: Species -> NASA names of its phases.
NASA_NAMES: dict[str, tuple[str, ...]] = {
    **{name: (name,) for name in ("O2", "N2", "Ar", "H2", "CO", "CO2", "H2O", "SO2", "SO3")},
    "S2": ("S2",),
    "P2": ("P2",),
    "C": ("C(gr)",),
    "Si": ("Si(cr)", "Si(L)"),
    "Fe": ("Fe(a)", "Fe(c)", "Fe(d)", "Fe(L)"),
    "Cr": ("Cr(cr)", "Cr(L)"),
    "V": ("V(cr)", "V(L)"),
    "Ti": ("Ti(a)", "Ti(b)", "Ti(L)"),
    "Al": ("AL(cr)", "AL(L)"),
    "Ni": ("Ni(cr)", "Ni(L)"),
    "Cu": ("Cu(cr)", "Cu(L)"),
    "Mo": ("Mo(cr)", "Mo(L)"),
    "Nb": ("Nb(cr)", "Nb(L)"),
    "Mg": ("Mg(cr)", "Mg(L)"),
    "Ca": ("Ca(a)", "Ca(b)", "Ca(L)"),
    "Ba": ("Ba(cr)", "Ba(L)"),
    "Na": ("Na(cr)", "Na(L)"),
    "K": ("K(cr)", "K(L)"),
    "B": ("B(b)", "B(L)"),
    "Zn": ("Zn(cr)", "Zn(L)"),
    "Pb": ("Pb(cr)", "Pb(L)"),
    "S": ("S(cr1)", "S(cr2)", "S(L)"),
    "P": ("P(cr)", "P(L)"),
    "FeO": ("FeO(s)", "FeO(L)"),
    "Fe3O4": ("Fe3O4(s)",),
    "Fe2O3": ("Fe2O3(s)",),
    "SiO2": ("SiO2(Lqz)", "SiO2(hqz)", "SiO2(L)"),
    "CaO": ("CaO(s)", "CaO(L)"),
    "MgO": ("MgO(s)", "MgO(L)"),
    "Al2O3": ("AL2O3(a)", "AL2O3(L)"),
    "TiO2": ("TiO2(ru)", "TiO2(L)"),
    "V2O3": ("V2O3(s)", "V2O3(L)"),
    "V2O5": ("V2O5(s)", "V2O5(L)"),
    "Cr2O3": ("Cr2O3(s)", "Cr2O3(L)"),
    "P4O10": ("P4O10(s)",),
    "Na2O": ("Na2O(c)", "Na2O(a)", "Na2O(L)"),
    "K2O": ("K2O(s)",),
    "BaO": ("BaO(s)", "BaO(L)"),
    "PbO": ("PbO(rd)", "PbO(yw)", "PbO(L)"),
    "CaCO3": ("CaCO3(caL)",),
    "MgCO3": ("MgCO3(s)",),
    "CaSO4": ("CaSO4(s)",),
    "Na2CO3": ("Na2CO3(I)", "Na2CO3(II)", "Na2CO3(L)"),
    "Ca(OH)2": ("CaO2H2(s)",),
    "Mg(OH)2": ("MgO2H2(s)",),
    "CaF2": ("CaF2(a)", "CaF2(b)", "CaF2(L)"),
    "CaS": ("CaS(s)",),
    "FeS": ("FeS(a)", "FeS(b)", "FeS(c)", "FeS(L)"),
    "SiC": ("SiC(b)",),
    "Mg2SiO4": ("Mg2SiO4(s)", "Mg2SiO4(L)"),
    "MgAl2O4": ("MgAL2O4(s)", "MgAL2O4(L)"),
    "MgSiO3": ("MgSiO3(I)", "MgSiO3(II)", "MgSiO3(III)", "MgSiO3(L)"),
    "Al6Si2O13": ("AL6Si2O13(s)",),
    "H2O_liquid": ("H2O(L)",),
}


@cache
def janaf_enthalpy(index: str) -> tuple[np.ndarray, np.ndarray]:
    """T [K] and H - H(elements, 298.15 K) [kJ/mol] of a JANAF table.

    Temperatures of a transition, which stand twice, are left out; so is all above the boiling
    point at 1 bar, where the tables of the elements change to the gas and ours do not.
    """
    from janaf.table import Table

    rows: list[tuple[float, float]] = []
    formation = None
    for line in Table(index).raw.splitlines()[2:]:
        cells = line.split("\t")
        try:
            T, increment = float(cells[0]), float(cells[4])
        except (ValueError, IndexError):
            continue
        if len(cells) > 5 and "GAS" in cells[5]:
            break
        if T == 298.15:
            formation = float(cells[5])
        rows.append((T, increment))
    assert formation is not None, index
    temps = [T for T, _ in rows]
    kept = [(T, dH + formation) for T, dH in rows if temps.count(T) == 1]
    T, H = np.array(kept).T
    return T, H


@cache
def nasa_species(name: str):  # type: ignore[no-untyped-def]
    """A species of the NASA files that `cantera` carries, by its NASA name."""
    import cantera

    for file in ("nasa_condensed.yaml", "nasa_gas.yaml"):
        for species in _nasa_file(file):
            if species.name == name:
                return species
    raise KeyError(name, cantera.__version__)


@cache
def _nasa_file(file: str):  # type: ignore[no-untyped-def]
    import cantera

    return cantera.Species.list_from_file(file)
