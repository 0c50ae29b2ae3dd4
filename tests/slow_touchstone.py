"""A second reader of two-port Touchstone files, slow and strict, written from the text of the standard alone.

It shares no code with the package. It reads what the standard allows and refuses everything else with ValueError:
Touchstone File Format Specification Rev. 1.1 (2002), Version 2.0 (2009) and 2.1 (2024). A file that the package reads
without a finding must read here to the same numbers; where the package gives a finding, it has said what it did.
"""

from __future__ import annotations

import cmath
import math
import re
from fractions import Fraction

PATTERN = re.compile(r"([+-]?)(\d*)\.?(\d*)(?:[eE]([+-]?\d+))?", re.ASCII)
UNITS = {"hz": 1.0, "khz": 1e3, "mhz": 1e6, "ghz": 1e9}


def number(word: str) -> float:
    """Return a decimal number, worked out with whole numbers and rounded once."""
    match = PATTERN.fullmatch(word)
    if not match or not (match[2] or match[3]) or word in (".", "+.", "-."):
        raise ValueError(word)
    sign, whole, decimals, exponent = match.groups()
    power = int(exponent or 0) - len(decimals)
    digits = int(whole + decimals)
    if digits == 0:
        return -0.0 if sign == "-" else 0.0
    if power + len(str(digits)) > 310:
        raise ValueError(word)
    if power + len(str(digits)) < -330:
        return -0.0 if sign == "-" else 0.0
    exact = Fraction(digits) * Fraction(10) ** power
    try:
        value = exact.numerator / exact.denominator  # Python rounds the quotient of whole numbers correctly
    except OverflowError:
        raise ValueError(word) from None
    return -value if sign == "-" else value


def lines_of(data: bytes) -> list[str]:
    """Return the lines without comments and outer blanks, those that hold nothing left out."""
    if data.startswith(b"\xef\xbb\xbf"):
        data = data[3:]
    try:
        text = data.decode("utf-8")
    except UnicodeDecodeError:
        text = data.decode("latin-1")  # one byte a letter
    lines = re.split(r"\r\n|\r|\n", text)
    return [line for line in (line.split("!", 1)[0].strip(" \t") for line in lines) if line]


def option_line(line: str):
    """Return unit, kind, format and reference impedances."""
    if not line.startswith("#"):
        raise ValueError(line)
    words = [word for word in re.split("[ \t]+", line[1:].lower()) if word]
    unit, kind, form, references = [], [], [], []
    while words:
        word = words.pop(0)
        if word in UNITS:
            unit.append(UNITS[word])
        elif word in ("s", "y", "z", "g", "h"):
            kind.append(word)
        elif word in ("ma", "db", "ri"):
            form.append(word)
        elif word == "r" and not references:
            references.append(number(words.pop(0)))
            if words and re.match(r"[+\-.0-9]", words[0]):  # a value for each port, version 2.1
                references.append(number(words.pop(0)))
        else:
            raise ValueError(word)
    if len(unit) > 1 or len(kind) > 1 or len(form) > 1:
        raise ValueError(line)
    if not all(0 < value < math.inf for value in references):
        raise ValueError(line)
    ohms = references or [50.0]
    return [*unit, 1e9][0], [*kind, "s"][0], [*form, "ma"][0], (ohms[0], ohms[-1])


def pair(first: float, second: float, form: str) -> complex:
    if form == "ri":
        return complex(first, second)
    magnitude = 10 ** (first / 20) if form == "db" else first
    return magnitude * cmath.exp(1j * math.radians(second))


def to_s(kind: str, four, ohms: tuple[float, float]):
    """Return S11, S21, S12, S22 of parameters in ohm or siemens, by way of the admittance or impedance matrix.

    With V = Z I: S = F (Z - G)(Z + G)^-1 F^-1, G the diagonal of impedances and F that of 1 / (2 sqrt(R))
    (K. Kurokawa, IEEE Trans. MTT 13(2), 1965, 194-202). H and G have their own such form: the ports' waves
    a = (V + R I) / 2 sqrt(R), b = (V - R I) / 2 sqrt(R) are solved for from the four equations of the two-port.
    """
    n11, n21, n12, n22 = four
    if kind == "s":
        return four
    # A V + B I = 0 for (V1, V2) and (I1, I2)
    a, b = {
        "z": (((1, 0), (0, 1)), ((-n11, -n12), (-n21, -n22))),
        "y": (((-n11, -n12), (-n21, -n22)), ((1, 0), (0, 1))),
        "h": (((1, -n12), (0, -n22)), ((-n11, 0), (-n21, 1))),
        "g": (((-n11, 0), (-n21, 1)), ((1, -n12), (0, -n22))),
    }[kind]
    roots = [math.sqrt(ohm) for ohm in ohms]
    # V = sqrt(R) (a + b), I = (a - b) / sqrt(R)
    to_b = [[a[i][j] * roots[j] - b[i][j] / roots[j] for j in (0, 1)] for i in (0, 1)]
    to_a = [[a[i][j] * roots[j] + b[i][j] / roots[j] for j in (0, 1)] for i in (0, 1)]
    determinant = to_b[0][0] * to_b[1][1] - to_b[0][1] * to_b[1][0]
    inverse = ((to_b[1][1], -to_b[0][1]), (-to_b[1][0], to_b[0][0]))
    s = [[-sum(inverse[i][k] * to_a[k][j] for k in (0, 1)) / determinant for j in (0, 1)] for i in (0, 1)]
    return s[0][0], s[1][0], s[0][1], s[1][1]


def in_ohm(kind: str, four, ohm: float):
    """Return parameters that version 1 has normalised to one impedance in ohm and siemens."""
    n11, n21, n12, n22 = four
    first, second = {"s": (1, 1), "z": (ohm, ohm), "y": (1 / ohm, 1 / ohm), "h": (ohm, 1 / ohm), "g": (1 / ohm, ohm)}[
        kind
    ]
    middle = {"z": ohm, "y": 1 / ohm}.get(kind, 1)
    return n11 * first, n21 * middle, n12 * middle, n22 * second


def rising(rows, strictly_above: float = -1.0) -> None:
    for row in rows:
        if not row[0] > strictly_above or row[0] < 0 or math.isinf(row[0]):
            raise ValueError(row)
        strictly_above = row[0]


def numbers_of(line: str) -> list[float]:
    return [number(word) for word in re.split("[ \t]+", line)]


def parse(data: bytes):
    """Return frequencies in Hz, rows of S11 S21 S12 S22, noise rows with Rn in ohm, references, kind and format."""
    lines = lines_of(data)
    if not lines:
        raise ValueError("nothing")
    return parse_2(lines) if lines[0].lower().startswith("[version]") else parse_1(lines)


def parse_1(lines: list[str]):
    unit, kind, form, ohms = option_line(lines[0])
    if kind != "s" and ohms[0] != ohms[1]:
        raise ValueError("normalised to what")
    rows, noise = [], []
    for line in lines[1:]:
        if line.startswith("#"):
            continue  # "only the first option line counts"
        row = numbers_of(line)
        row[0] *= unit
        if noise or (rows and len(row) == 5 and row[0] <= rows[-1][0]):
            noise.append(row)
        else:
            rows.append(row)
    if not rows or any(len(row) != 9 for row in rows) or any(len(row) != 5 for row in noise):
        raise ValueError("not a two-port")
    rising(rows)
    rising(noise)
    fours = [[pair(row[i], row[i + 1], form) for i in (1, 3, 5, 7)] for row in rows]
    s = [to_s(kind, in_ohm(kind, four, ohms[0]), ohms) for four in fours]
    return [row[0] for row in rows], s, [[*row[:4], row[4] * ohms[0]] for row in noise], ohms, kind + form


def parse_2(lines: list[str]):
    said: dict[str, list[str]] = {}
    option, name, inside, bare_argument = None, "", False, False
    for line in lines:
        match = re.match(r"\[([^\]]*)\](.*)", line)
        key = match[1].lower() if match else ""
        if inside:
            inside = key != "end information"
            continue
        if "end" in said:
            raise ValueError("below the end")
        if match:
            if key in said:
                raise ValueError(key)
            inside = key == "begin information"
            bare_argument |= key in ("network data", "noise data") and bool(match[2].strip(" \t"))
            name = key
            said[name] = [match[2].strip(" \t")] if match[2].strip(" \t") else []
        elif line.startswith("#") and name not in ("network data", "noise data"):
            if option and option_line(line) != option:
                raise ValueError("two option lines")
            option = option_line(line)
        elif name in ("reference", "network data", "noise data"):
            said[name].append(line)
        else:
            raise ValueError(line)
    if inside or said["version"] not in (["2.0"], ["2.1"]) or said["number of ports"] != ["2"] or option is None:
        raise ValueError("header")
    known = {"version", "number of ports", "two-port data order", "number of frequencies", "reference", "end"}
    known |= {"number of noise frequencies", "matrix format", "network data", "noise data", "begin information"}
    if set(said) - known or said.get("end") != [] or bare_argument:
        raise ValueError("keywords")
    unit, kind, form, ohms = option
    if "reference" in said:
        values = [number(word) for line in said["reference"] for word in re.split("[ \t]+", line)]
        if len(values) != 2 or not all(0 < value < math.inf for value in values):
            raise ValueError("reference")
        ohms = (values[0], values[1])
    rows = [numbers_of(line) for line in said["network data"]]
    noise = [numbers_of(line) for line in said.get("noise data", [])]
    for row in (*rows, *noise):
        row[0] *= unit
    rising(rows)
    rising(noise)
    (order,) = said["two-port data order"]
    (matrix,) = said.get("matrix format", ["Full"])
    places = {"21_12": (1, 3, 5, 7), "12_21": (1, 5, 3, 7)}[order]
    width = 9
    if matrix.lower() != "full":
        places, width = {"lower": (1, 3, 3, 5), "upper": (1, 3, 3, 5)}[matrix.lower()], 7
    promised, promised_noise = said["number of frequencies"], said.get("number of noise frequencies", ["0"])
    if [str(len(rows))] != [promised[0].lstrip("0")] or int(promised_noise[0]) != len(noise):
        raise ValueError("counts")
    if any(len(row) != width for row in rows) or any(len(row) != 5 for row in noise):
        raise ValueError("not a two-port")
    s = [to_s(kind, [pair(row[i], row[i + 1], form) for i in places], ohms) for row in rows]
    return [row[0] for row in rows], s, noise, ohms, kind + form
