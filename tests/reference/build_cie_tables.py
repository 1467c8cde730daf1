"""Write ``layerscan/optics/cie_tables.csv`` from the CIE tables that colour-science 0.4.7 carries.

    python tests/reference/build_cie_tables.py layerscan/optics/cie_tables.csv

Colour-matching functions: CIE 018:2019 tables (CIE 1931 2 degree and 1964 10 degree observers, 1 nm). Illuminants:
CIE standard illuminants A and D65 and illuminant D50 (CIE 15:2018, 5 nm), brought to 1 nm by linear interpolation.
"""

from __future__ import annotations

import sys
from pathlib import Path

import colour
import numpy as np

WAVELENGTH = np.arange(360, 831)
HEADER = """# CIE 1931 2 degree and 1964 10 degree colour-matching functions (CIE 018:2019, 1 nm) and the relative
# spectral power of illuminants D65, D50 and A (CIE 15:2018, 5 nm, linear between).
wavelength_nm,x2,y2,z2,x10,y10,z10,D65,D50,A
"""


def main() -> None:
    """Write the table."""
    columns = [WAVELENGTH.astype(float)]
    for name in ("CIE 1931 2 Degree Standard Observer", "CIE 1964 10 Degree Standard Observer"):
        table = colour.MSDS_CMFS[name]
        assert (table.wavelengths == WAVELENGTH).all()
        columns += list(table.values.T)
    for name in ("D65", "D50", "A"):
        source = colour.SDS_ILLUMINANTS[name]
        columns.append(np.interp(WAVELENGTH, source.wavelengths, source.values))
    rows = [",".join(f"{value:.10g}" for value in row) for row in np.array(columns).T]
    Path(sys.argv[1]).write_text(HEADER + "\n".join(rows) + "\n", encoding="utf-8")


if __name__ == "__main__":
    main()
