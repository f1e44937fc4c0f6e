#!/usr/bin/env python3
"""Writes the basis-set files of this folder from the Basis Set Exchange collection.

    pip install basis_set_exchange==0.12
    python3 src/basis/data/write.py

One text file per set, `#` starts a comment:

    name NAME                     as in the collection
    description TEXT
    kind cartesian|spherical      what the set defines for d functions
    collection TEXT               collection and its version
    version N                     version of the set in the collection
    paper KEY TEXT                one line per paper
    cite SYMBOLS : KEYS           the papers that the set asks to be cited for these elements
    element SYMBOL
    shell LETTERS KIND            `s`, `sp`, `d` …; KIND only if a letter is d or higher
    EXPONENT COEFFICIENT …        one line per primitive, one coefficient per contraction

Numbers are the collection's decimal strings, untouched, except that a zero coefficient is written `0`.
"""

import pathlib
import sys

import basis_set_exchange as bse

HERE = pathlib.Path(__file__).parent
LETTERS = "spdfg"
LAST = 36

# Set → file, kind of d functions, description. f and g are spherical in all of them.
SETS = {
    "STO-3G": ("sto-3g", "spherical", "minimal, three Gaussians per Slater function"),
    "3-21G": ("3-21g", "cartesian", "split valence, small core"),
    "6-31G": ("6-31g", "cartesian", "split valence"),
    "6-31G*": ("6-31g_d", "cartesian", "split valence, polarisation on heavy atoms"),
    "6-31G**": ("6-31g_dp", "cartesian", "split valence, polarisation on all atoms"),
    "6-31+G*": ("6-31+g_d", "cartesian", "split valence, polarisation and diffuse functions on heavy atoms"),
    "6-31++G**": ("6-31++g_dp", "cartesian", "split valence, polarisation and diffuse functions on all atoms"),
    "6-311G": ("6-311g", "spherical", "valence triple zeta"),
    "6-311G**": ("6-311g_dp", "spherical", "valence triple zeta, polarisation on all atoms"),
    "6-311++G**": ("6-311++g_dp", "spherical", "valence triple zeta, polarisation and diffuse functions on all atoms"),
    "cc-pVDZ": ("cc-pvdz", "spherical", "correlation-consistent double zeta"),
    "cc-pVTZ": ("cc-pvtz", "spherical", "correlation-consistent triple zeta"),
    "cc-pVQZ": ("cc-pvqz", "spherical", "correlation-consistent quadruple zeta"),
    "aug-cc-pVDZ": ("aug-cc-pvdz", "spherical", "correlation-consistent double zeta with diffuse functions"),
    "aug-cc-pVTZ": ("aug-cc-pvtz", "spherical", "correlation-consistent triple zeta with diffuse functions"),
    "def2-SVP": ("def2-svp", "spherical", "split valence, polarisation on all atoms, second generation"),
    "def2-TZVP": ("def2-tzvp", "spherical", "valence triple zeta, polarisation on all atoms, second generation"),
}

# Shells whose kind in the collection differs from the table above: the polarisation functions of
# Na–Ar in the 6-311G family were copied with the kind of the smaller family they come from.
KNOWN_DIFFERENCES = {(name, z) for name in ("6-311G**", "6-311++G**") for z in range(11, 19)}


def symbol(z):
    return bse.lut.element_sym_from_Z(z, normalize=True)


def paper(entry):
    """One line of text for an article, None for anything else (data files, programs)."""
    if entry["_entry_type"] != "article":
        return None
    authors = "; ".join(entry["authors"])
    text = f"{authors}: {entry['title']}. {entry['journal']} {entry['volume']}, {entry['pages']} ({entry['year']})"
    if "doi" in entry:
        text += f". doi:{entry['doi']}"
    return " ".join(text.split())


def shell_lines(name, z, shell):
    momenta = shell["angular_momentum"]
    columns = shell["coefficients"]
    letters = "".join(LETTERS[l] for l in momenta)
    if len(momenta) == 1:
        letters *= len(columns)
    assert len(letters) == len(columns), (name, z, shell)
    line = f"shell {letters}"
    if max(momenta) > 1:
        kind = SETS[name][1] if max(momenta) == 2 else "spherical"
        given = shell["function_type"].removeprefix("gto_")
        assert given == kind or (name, z) in KNOWN_DIFFERENCES, (name, z, shell)
        line += f" {kind}"
    yield line
    for p, exponent in enumerate(shell["exponents"]):
        row = [c[p] if float(c[p]) != 0.0 else "0" for c in columns]
        yield " ".join([exponent, *row])


def usable(element):
    if "electron_shells" not in element or "ecp_potentials" in element:
        return False
    return all(l < len(LETTERS) for s in element["electron_shells"] for l in s["angular_momentum"])


def set_lines(name):
    data = bse.get_basis(name)
    elements = [z for z in range(1, LAST + 1) if str(z) in data["elements"] and usable(data["elements"][str(z)])]
    yield "# Written by write.py; do not edit."
    yield f"name {name}"
    yield f"description {SETS[name][2]}"
    yield f"kind {SETS[name][1]}"
    yield f"collection Basis Set Exchange {bse.__version__}"
    yield f"version {data['version']}"
    papers, groups = {}, {}
    for z in elements:
        keys = []
        for block in data["elements"][str(z)]["references"]:
            for key in block["reference_keys"]:
                text = paper(bse.api.get_reference_data()[key])
                if text and key not in keys:
                    keys.append(key)
                    papers[key] = text
        groups.setdefault(tuple(keys), []).append(z)
    for key, text in papers.items():
        yield f"paper {key} {text}"
    for keys, members in groups.items():
        yield f"cite {' '.join(map(symbol, members))} : {' '.join(keys)}".rstrip()
    for z in elements:
        yield f"element {symbol(z)}"
        for shell in data["elements"][str(z)]["electron_shells"]:
            yield from shell_lines(name, z, shell)


def main():
    for name, (file, _, _) in SETS.items():
        path = HERE / f"{file}.txt"
        path.write_text("\n".join(set_lines(name)) + "\n", encoding="utf-8")
        print(f"{path.name}: {path.stat().st_size} bytes", file=sys.stderr)


main()
