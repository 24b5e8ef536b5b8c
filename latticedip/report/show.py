"""What was understood, on screen."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from latticedip.report.field import coordinates, ordering_lines
from latticedip.report.su import format_su, with_su
from latticedip.report.tables import (
    Column,
    bullets,
    caption,
    decimals_for,
    direction,
    fixed,
    heading,
    pairs,
    paragraph,
    short,
    table,
    vector,
)


def show_text(document: Mapping[str, Any], *, width: int | None = None) -> str:
    """Return the description of a structure or a study."""
    parts = [heading(document["title"]), "", _crystal(document["crystal"], width), "", _sites(document, width)]
    if document["moments_muB"]:
        uncertain = document["moments_su_muB"]
        listed = [
            (name, f"{format_su(size, uncertain[name]) if uncertain.get(name) else short(size)} µB")
            for name, size in document["moments_muB"].items()
        ]
        parts += ["", "Moments stated", "", pairs(listed, width=width)]
    if document["moment_spread"]:
        parts += ["", "Spread of the moments", "", pairs(document["moment_spread"].items(), width=width)]
    for entry in document["orderings"]:
        parts += ["", caption(f"Ordering: {entry['ordering']}"), "", _ordering(entry, width)]
    if document["neighbours"]:
        parts += ["", "Nearest magnetic neighbours", "", _neighbours(document["neighbours"], width)]
        parts += ["", paragraph("The dipolar scale is µ0 m1 m2/(4π r³).", width=width)]
    if document["probes"]:
        parts += ["", "Probes", "", _probes(document["probes"], width)]
        contacts = _contacts(document["probes"])
        parts += ["", "Contact terms", "", bullets(contacts, width=width)] if contacts else []
        motion = [f"{row['probe']}: {words}" for row in document["probes"] for words in row["motion"]]
        parts += ["", "Motion, uncertainty and moved neighbours", "", bullets(motion, width=width)] if motion else []
    if document["sample"] is not None:
        parts += ["", "Sample", "", _sample(document["sample"], width)]
    if document["susceptibility"]:
        parts += ["", "Susceptibility", "", pairs(document["susceptibility"].items(), width=width)]
    if document["abundances"]:
        listed = [(name, short(share)) for name, share in document["abundances"].items()]
        parts += ["", "Abundances stated", "", pairs(listed, width=width)]
    notes = [*document["crystal"]["notes"], *(n for entry in document["orderings"] for n in entry["notes"])]
    if notes:
        parts += ["", "Notes", "", bullets(notes, width=width)]
    if document["warnings"]:
        parts += ["", "Warnings", "", bullets(document["warnings"], width=width)]
    return "\n".join(parts)


def _crystal(crystal: Mapping[str, Any], width: int | None) -> str:
    centrings = crystal["centrings"]
    count = crystal["symmetry_operations"]
    symmetry = f"{count} operation{'' if count == 1 else 's'} of the structure without moments"
    if centrings > 1:
        symmetry += f"; centred: {centrings} primitive cells in this cell"
    items = [
        ("a, b, c", "  ".join(fixed(x, 4) for x in crystal["lengths_A"]) + "  Å"),
        ("alpha, beta, gamma", "  ".join(short(round(x, 4)) for x in crystal["angles_deg"]) + "  degrees"),
        ("volume", f"{crystal['volume_A3']:.3f} Å³"),
        ("atoms", str(crystal["atoms"])),
        ("symmetry", symmetry),
    ]
    if not all(crystal["periodic"]):
        along = [axis for axis, periodic in zip("abc", crystal["periodic"], strict=True) if periodic]
        where = "along " + ", ".join(along) if along else "in no direction"
        items[-1] = ("periodic", f"{where}; the other vectors only complete the frame")
    return pairs(items, width=width)


def _sites(document: Mapping[str, Any], width: int | None) -> str:
    columns = [
        Column("site", words=True),
        Column("element", words=True),
        Column("occupancy"),
        Column("atom"),
        *(Column(x) for x in "xyz"),
    ]
    cells = []
    for site in document["sites"]:
        occupancy = " to ".join(short(p) for p in dict.fromkeys((site["occupancies"][0], site["occupancies"][-1])))
        for number, position in enumerate(site["positions"], start=1):
            lead = [site["label"], ", ".join(site["elements"]), occupancy] if number == 1 else ["", "", ""]
            shown = [with_su(x, 5, su) for x, su in zip(position, site["positions_su"][number - 1], strict=True)]
            cells.append([*lead, f"{number} of {site['multiplicity']}", *shown])
    return table(columns, cells, width=width, keys=1)


def _ordering(entry: Mapping[str, Any], width: int | None) -> str:
    items = ordering_lines(entry)
    own = entry["own_cell"]
    if own is not None:
        lengths = " × ".join(short(x) for x in own["lengths_A"])
        items += [("its own cell", f"{lengths} Å, {own['atoms']} atoms"), ("placed", own["how"])]
    if not entry["atoms"]:
        return pairs([*items, ("moments", "all zero")], width=width)
    collinear = entry["direction_abc"] is not None
    if collinear:
        items.append(("moments along", f"{direction(entry['direction_abc'])} (components along a, b, c)"))
    items.append(("cells listed", entry["cells_are"]))
    return pairs(items, width=width) + "\n\n" + moments_table(entry, width=width)


def moments_table(entry: Mapping[str, Any], *, width: int | None = None) -> str:
    """Return the moments of an ordering over its first cells: sizes along a common direction, or components."""
    return (_collinear if entry["direction_abc"] is not None else _vectors)(entry, width)


def _collinear(entry: Mapping[str, Any], width: int | None) -> str:
    """One line per atom, one column per cell: the signed size along the common direction."""
    cells = entry["cells"]
    names = [("moment" if len(cells) == 1 else "cell\n" + ",".join(str(n) for n in cell)) for cell in cells]
    columns = [Column("site", words=True), Column("atom"), Column("position", words=True)]
    columns += [Column(name, "µB") for name in names]
    rows = [
        [
            atom["label"],
            str(atom["atom"]),
            coordinates(atom["position"]),
            *(with_su(v, 4, su) for v, su in zip(atom["along_muB"], _along_su(atom, len(cells)), strict=True)),
        ]
        for atom in entry["atoms"]
    ]
    return table(columns, rows, width=width, keys=2)


def _along_su(atom: Mapping[str, Any], n_cells: int) -> Sequence[float | None]:
    """The uncertainty of the moment of an atom in every cell: where amplitudes state it, or where one cell is all."""
    known: Sequence[float | None] | None = atom.get("moments_su_along_muB")
    return known or [atom["along_su_muB"] if n_cells == 1 else None] * n_cells


def _vectors(entry: Mapping[str, Any], width: int | None) -> str:
    """One line per atom and cell: components along a, b, c and the size."""
    several = len(entry["cells"]) > 1
    columns = [Column("site", words=True), Column("atom"), Column("position", words=True)]
    columns += [Column("cell", words=True)] if several else []
    columns += [Column("along a", "µB"), Column("along b", "µB"), Column("along c", "µB"), Column("size", "µB")]
    rows = []
    for atom in entry["atoms"]:
        for i, cell in enumerate(entry["cells"]):
            lead = [atom["label"], str(atom["atom"]), coordinates(atom["position"])] if i == 0 else ["", "", ""]
            lead += [",".join(str(n) for n in cell)] if several else []
            components = atom["moments_abc_muB"][i]
            known = atom.get("moments_su_abc_muB")
            su = known[i] if known else (atom["moment_su_muB"] if not several else None) or [None] * 3
            shown = [with_su(v, 4, s) for v, s in zip(components, su, strict=True)]
            rows.append([*lead, *shown, fixed(atom["sizes_muB"][i], 4)])
    return table(columns, rows, width=width, keys=2)


def _neighbours(rows: Sequence[Mapping[str, Any]], width: int | None) -> str:
    columns = [
        Column("site", words=True),
        Column("neighbour", words=True),
        Column("count"),
        Column("distance", "Å"),
        Column("dipolar\nscale", "µeV"),
        Column("dipolar\nscale", "K"),
    ]
    micro = decimals_for([row["dipolar_scale_ueV"] for row in rows], significant=5)
    kelvin = decimals_for([row["dipolar_scale_K"] for row in rows], significant=5)
    cells = [
        [
            row["site"] if i == 0 or rows[i - 1]["site"] != row["site"] else "",
            row["neighbour"],
            str(row["count"]),
            fixed(row["distance_A"], 4),
            fixed(row["dipolar_scale_ueV"], micro),
            fixed(row["dipolar_scale_K"], kelvin),
        ]
        for i, row in enumerate(rows)
    ]
    return table(columns, cells, width=width, keys=1)


def _probes(rows: Sequence[Mapping[str, Any]], width: int | None) -> str:
    columns = [
        Column("probe", words=True),
        Column("particle", words=True),
        Column("gamma/2pi", "MHz/T"),
        Column("place", words=True),
        Column("nearest atom", words=True),
        Column("nearest ion", words=True),
    ]
    cells = []
    for row in rows:
        many = f"{row['points']} atom{'s' if row['points'] > 1 else ''}"
        place = coordinates(row["position"]) if row["site"] is None else f"{row['site']}, {many}"
        cells.append(
            [
                row["probe"],
                row["particle"],
                fixed(row["MHz_per_T"], 4),
                place,
                _near(row["nearest_atom"], row["nearest_atom_A"]),
                _near(row["nearest_ion"], row["nearest_ion_A"]),
            ]
        )
    return table(columns, cells, width=width, keys=1)


def _contacts(rows: Sequence[Mapping[str, Any]]) -> list[str]:
    lines = []
    for row in rows:
        for term in row["contact"]:
            if term["coupling_T_per_muB"] is None:
                lines.append(f"{row['probe']}: moment density {vector(term['moment_density_muB_per_A3'])} µB/Å³")
                continue
            tensor = term["coupling_T_per_muB"]
            scalar = all(tensor[i][j] == (tensor[0][0] if i == j else 0) for i in range(3) for j in range(3))
            size = short(tensor[0][0]) if scalar else "; ".join(vector(line) for line in tensor)
            reach = f"shell {term['shell']}" if term["within_A"] is None else f"all within {short(term['within_A'])} Å"
            found = term.get("refused") or "; ".join(
                f"{n['count']} {n['site']} at {n['distance_A']:.3f} Å" for n in term["neighbours"] or []
            )
            lines.append(f"{row['probe']}: {size} T/µB for each ion of {reach}" + (f": {found}" if found else ""))
    return lines


def _near(label: str | None, distance: float | None) -> str:
    return "-" if label is None or distance is None else f"{label} {distance:.3f} Å"


def _sample(sample: Mapping[str, Any], width: int | None) -> str:
    tensor = sample["demagnetizing_tensor"]
    items = [("shape", sample["shape"])]
    if any(any(row) for row in tensor):
        items += [
            (f"N, row {axis}", "  ".join(fixed(x, 6) for x in row)) for axis, row in zip("xyz", tensor, strict=True)
        ]
    if not sample["uniform"]:
        items.append(("N is", "the volume average; the demagnetizing field is not uniform"))
    items.append(("applied field", f"{vector(sample['applied_T'])} T, Cartesian"))
    return pairs(items, width=width)
