"""Broken rig files: what is wrong with each, and the exact line that is printed. Read by the tests.

Each fault is made of the whole file by edits, (old, new); an empty old adds at the end.
"""

from __future__ import annotations

from typing import NamedTuple

WHOLE = """\
[rig]
title = "Impulse line"

[medium.oil]
density   = "871 kg/m^3 ± 0.5 %"
viscosity = "0.0296 Pa*s, u = 0.0006 Pa*s"

[[element]]
name   = "impulse line"
kind   = "laminar-line"
from   = "tapping"
to     = "gauge"
bore   = "4.00 mm ± 0.05 mm"
length = "3.20 m ± 0.01 m"
medium = "oil"

[[element]]
name       = "gauge chamber"
kind       = "chamber"
at         = "gauge"
compliance = "3.1e-12 m^3/Pa ± 8 %"

[[drive]]
name    = "line pressure"
imposes = "pressure"
at      = "tapping"
channel = "p_line"

[[reading]]
name    = "gauge pressure"
of      = "pressure"
at      = "gauge"
channel = "p_gauge"
"""


class Fault(NamedTuple):
    """One broken file.

    `line` is the place of the fault, `stands` what is written there; the printed line is
    "rig.toml:<line>: <says>".
    """

    name: str
    edits: tuple[tuple[str, str], ...]
    code: str
    line: int
    stands: str
    says: str

    def text(self) -> str:
        """The broken file."""
        out = WHOLE
        for old, new in self.edits:
            if old and old not in out:
                raise ValueError(f"{self.name}: {old!r} does not stand in the file")
            out = out.replace(old, new) if old else out + new
        return out


# fmt: off
FAULTS = (
    Fault(
        "syntax", (
            (
                'at      = "tapping"',
                "at      = tapping",
            ),
        ), "not-toml", 26,
        "at      = tapping",
        'this is not TOML: Invalid value; write key = "value" with quotes, one a line',
    ),
    Fault(
        "syntax-eof", (
            (
                "",
                'x = "abc',
            ),
        ), "not-toml", 34,
        'x = "abc',
        'this is not TOML: Unterminated string; write key = "value" with quotes, one a line',
    ),
    Fault(
        "dup-key", (
            (
                'bore   = "4.00 mm ± 0.05 mm"',
                'bore   = "4.00 mm"\nbore   = "4.1 mm"',
            ),
        ), "not-toml", 14,
        'bore   = "4.1 mm"',
        'this is not TOML: Cannot overwrite a value; write key = "value" with quotes, one a line',
    ),
    Fault(
        "unknown-table", (
            (
                "",
                '\n[limit]\ngain = "1"\n',
            ),
        ), "unknown-table", 35,
        "[limit]",
        "[limit]: a table 'limit' is not known; did you mean 'limits'?",
    ),
    Fault(
        "unknown-table-list", (
            (
                "",
                '\n[[elements]]\nname = "x"\n',
            ),
        ), "unknown-table", 35,
        "[[elements]]",
        "[[elements]] number 1: a table 'elements' is not known; did you mean 'element'?",
    ),
    Fault(
        "unknown-key-rig", (
            (
                "title =",
                "titel =",
            ),
        ), "unknown-key", 2,
        'titel = "Impulse line"',
        "[rig]: key 'titel' is not known here; did you mean 'title'?",
    ),
    Fault(
        "unknown-key-el", (
            (
                "bore   =",
                "boer   =",
            ),
        ), "unknown-key", 13,
        'boer   = "4.00 mm ± 0.05 mm"',
        "[[element]] \"impulse line\": key 'boer' is not known here; did you mean 'bore'?",
    ),
    Fault(
        "unknown-key-drive", (
            (
                "imposes =",
                "impose =",
            ),
        ), "unknown-key", 25,
        'impose = "pressure"',
        "[[drive]] \"line pressure\": key 'impose' is not known here; did you mean 'imposes'?",
    ),
    Fault(
        "unknown-key-reading", (
            (
                "of      =",
                "off     =",
            ),
        ), "unknown-key", 31,
        'off     = "pressure"',
        "[[reading]] \"gauge pressure\": key 'off' is not known here; did you mean 'of'?",
    ),
    Fault(
        "unknown-kind", (
            (
                "laminar-line",
                "laminar-lin",
            ),
        ), "unknown-kind", 10,
        'kind   = "laminar-lin"',
        "[[element]] \"impulse line\": kind = 'laminar-lin' is not known; did you mean 'laminar-line'?",
    ),
    Fault(
        "unknown-medium", (
            (
                'medium = "oil"',
                'medium = "oli"',
            ),
        ), "unknown-medium", 15,
        'medium = "oli"',
        "[[element]] \"impulse line\": there is no [medium.oli]; did you mean 'oil'?",
    ),
    Fault(
        "unknown-prop", (
            (
                "viscosity =",
                "viscocity =",
            ),
        ), "unknown-key", 6,
        'viscocity = "0.0296 Pa*s, u = 0.0006 Pa*s"',
        "[medium.oil]: key 'viscocity' is not known here; did you mean 'viscosity'?",
    ),
    Fault(
        "lacks-prop", (
            (
                'viscosity = "0.0296 Pa*s, u = 0.0006 Pa*s"\n',
                "",
            ),
        ), "missing-property", 4,
        "[medium.oil]",
        "[medium.oil]: medium 'oil' has no viscosity; write viscosity = \"… Pa*s ± … %\"",
    ),
    Fault(
        "wrong-unit", (
            (
                "[[drive]]",
                "[[element]]\nname = \"s\"\nkind = \"spring\"\nfrom = \"a\"\nto = \"b\"\nstiffness = \"3 "
                "mm\"\n\n[[drive]]",
            ),
        ), "wrong-unit", 28,
        'stiffness = "3 mm"',
        "[[element]] \"s\": stiffness is in N/m; 'mm' is a length; write it as stiffness = "
        "\"1.00 N/m ± 1 %\"",
    ),
    Fault(
        "wrong-unit2", (
            (
                "4.00 mm ±",
                "4.00 kPa ±",
            ),
        ), "wrong-unit", 13,
        'bore   = "4.00 kPa ± 0.05 mm"',
        "[[element]] \"impulse line\": bore is in m; 'kPa' is a pressure; write it as bore = "
        "\"1.00 m ± 1 %\"",
    ),
    Fault(
        "wrong-tol-unit", (
            (
                "± 0.05 mm",
                "± 0.05 kg",
            ),
        ), "wrong-unit", 13,
        'bore   = "4.00 mm ± 0.05 kg"',
        "[[element]] \"impulse line\": bore is in m; 'kg' is a mass; write it as bore = \"1.00 m ± 1 %\"",
    ),
    Fault(
        "unknown-unit", (
            (
                '"3.20 m ± 0.01 m"',
                '"3.20 metrs ± 1 %"',
            ),
        ), "unknown-unit", 14,
        'length = "3.20 metrs ± 1 %"',
        "[[element]] \"impulse line\": unit 'metrs' is not known; did you mean 'ms'?",
    ),
    Fault(
        "no-unit", (
            (
                '"3.20 m ± 0.01 m"',
                "3.20",
            ),
        ), "no-unit", 14,
        "length = 3.20",
        '[[element]] "impulse line": length = 3.2 has no unit; write it as length = "1.00 m ± 1 %"',
    ),
    Fault(
        "no-unit-str", (
            (
                '"3.20 m ± 0.01 m"',
                '"3.20"',
            ),
        ), "no-unit", 14,
        'length = "3.20"',
        "[[element]] \"impulse line\": length = '3.20' has no unit; write it as length = \"1.00 "
        "m ± 1 %\"",
    ),
    Fault(
        "decimal-comma", (
            (
                "4.00 mm ± 0.05 mm",
                "4,00 mm",
            ),
        ), "bad-tolerance", 13,
        'bore   = "4,00 mm"',
        "[[element]] \"impulse line\": bore = '4,00 mm': '00 mm' is not a tolerance; write "
        "\"4.0 mm ± 0.1 mm\" or \"4.0 mm, u = 0.02 mm\", with a decimal point",
    ),
    Fault(
        "not-number", (
            (
                "4.00 mm ± 0.05 mm",
                "four mm",
            ),
        ), "bad-value", 13,
        'bore   = "four mm"',
        "[[element]] \"impulse line\": bore = 'four mm' is not a value; write it as bore = "
        "\"1.00 m ± 1 %\"",
    ),
    Fault(
        "two-tol", (
            (
                "4.00 mm ± 0.05 mm",
                "4.00 mm ± 0.05 mm, u = 0.1 mm",
            ),
        ), "bad-tolerance", 13,
        'bore   = "4.00 mm ± 0.05 mm, u = 0.1 mm"',
        "[[element]] \"impulse line\": bore = '4.00 mm ± 0.05 mm, u = 0.1 mm' states limits "
        "and a standard uncertainty; state one of them",
    ),
    Fault(
        "k-zero", (
            (
                "u = 0.0006 Pa*s",
                "U = 0.0006 Pa*s, k = 0",
            ),
        ), "bad-tolerance", 6,
        'viscosity = "0.0296 Pa*s, U = 0.0006 Pa*s, k = 0"',
        "[medium.oil]: viscosity = '0.0296 Pa*s, U = 0.0006 Pa*s, k = 0': k must lie above "
        "0; write the size of the uncertainty",
    ),
    Fault(
        "u-neg", (
            (
                "u = 0.0006 Pa*s",
                "u = -0.0006 Pa*s",
            ),
        ), "bad-tolerance", 6,
        'viscosity = "0.0296 Pa*s, u = -0.0006 Pa*s"',
        "[medium.oil]: viscosity = '0.0296 Pa*s, u = -0.0006 Pa*s': u must not be negative; "
        "write the size of the uncertainty",
    ),
    Fault(
        "k-alone", (
            (
                "u = 0.0006 Pa*s",
                "k = 2",
            ),
        ), "bad-tolerance", 6,
        'viscosity = "0.0296 Pa*s, k = 2"',
        "[medium.oil]: viscosity = '0.0296 Pa*s, k = 2' needs either u, or U (with its k); "
        "write \"…, u = 0.02 mm\" or \"…, U = 0.04 mm, k = 2\"",
    ),
    Fault(
        "u-and-U", (
            (
                "u = 0.0006 Pa*s",
                "u = 0.0006 Pa*s, U = 0.0012 Pa*s",
            ),
        ), "bad-tolerance", 6,
        'viscosity = "0.0296 Pa*s, u = 0.0006 Pa*s, U = 0.0012 Pa*s"',
        "[medium.oil]: viscosity = '0.0296 Pa*s, u = 0.0006 Pa*s, U = 0.0012 Pa*s' needs "
        "either u, or U (with its k); write \"…, u = 0.02 mm\" or \"…, U = 0.04 mm, k = 2\"",
    ),
    Fault(
        "limits0", (
            (
                "± 0.05 mm",
                "± 4 mm",
            ),
        ), "not-positive", 13,
        'bore   = "4.00 mm ± 4 mm"',
        "[[element]] \"impulse line\": bore = '4.00 mm ± 4 mm' has limits that reach 0; state "
        "u = … instead, or narrower limits",
    ),
    Fault(
        "negative", (
            (
                "4.00 mm ± 0.05",
                "-4.00 mm ± 0.05",
            ),
        ), "not-positive", 13,
        'bore   = "-4.00 mm ± 0.05 mm"',
        "[[element]] \"impulse line\": bore = '-4.00 mm ± 0.05 mm' must lie above 0; write its "
        "size; directions are in from and to",
    ),
    Fault(
        "zero", (
            (
                '"4.00 mm ± 0.05 mm"',
                '"0 mm"',
            ),
        ), "not-positive", 13,
        'bore   = "0 mm"',
        "[[element]] \"impulse line\": bore = '0 mm' must lie above 0; write its size; "
        "directions are in from and to",
    ),
    Fault(
        "bool", (
            (
                '"4.00 mm ± 0.05 mm"',
                "true",
            ),
        ), "bad-value", 13,
        "bore   = true",
        '[[element]] "impulse line": bore = True is not a value; write it as bore = "1.00 m ± 1 %"',
    ),
    Fault(
        "missing-key", (
            (
                'bore   = "4.00 mm ± 0.05 mm"\n',
                "",
            ),
        ), "missing-key", 8,
        "[[element]]",
        '[[element]] "impulse line": bore is missing; a laminar-line needs bore and length and medium',
    ),
    Fault(
        "missing-kind", (
            (
                'kind   = "laminar-line"\n',
                "",
            ),
        ), "missing-key", 8,
        "[[element]]",
        '[[element]] "impulse line": kind is missing; write kind = "…"',
    ),
    Fault(
        "missing-name", (
            (
                'name   = "impulse line"\n',
                "",
            ),
        ), "missing-key", 8,
        "[[element]]",
        '[[element]] number 1: name is missing; write name = "…"',
    ),
    Fault(
        "missing-to", (
            (
                'to     = "gauge"\n',
                "",
            ),
        ), "missing-node", 8,
        "[[element]]",
        '[[element]] "impulse line": to is missing; write to = "node"',
    ),
    Fault(
        "missing-imposes", (
            (
                'imposes = "pressure"\n',
                "",
            ),
        ), "missing-key", 23,
        "[[drive]]",
        '[[drive]] "line pressure": imposes is missing; write imposes = "…"',
    ),
    Fault(
        "missing-at-drive", (
            (
                'at      = "tapping"\n',
                "",
            ),
        ), "missing-node", 23,
        "[[drive]]",
        '[[drive]] "line pressure": its place is missing; write at = "node", or from and to',
    ),
    Fault(
        "doubled", (
            (
                'name       = "gauge chamber"',
                'name       = "impulse line"',
            ),
        ), "doubled-name", 18,
        'name       = "impulse line"',
        "[[element]] \"impulse line\": the name 'impulse line' is given twice; give each "
        "element a name of its own",
    ),
    Fault(
        "doubled-drive", (
            (
                "",
                '\n[[drive]]\nname = "line pressure"\nimposes = "flow"\nat = "gauge"\n',
            ),
        ), "doubled-name", 36,
        'name = "line pressure"',
        "[[drive]] \"line pressure\": the name 'line pressure' is given twice; give each drive "
        "a name of its own",
    ),
    Fault(
        "doubled-reading", (
            (
                "",
                '\n[[reading]]\nname = "gauge pressure"\nof = "pressure"\nat = "tapping"\n',
            ),
        ), "doubled-name", 36,
        'name = "gauge pressure"',
        "[[reading]] \"gauge pressure\": the name 'gauge pressure' is given twice; give each "
        "reading a name of its own",
    ),
    Fault(
        "self", (
            (
                'to     = "gauge"',
                'to     = "tapping"',
            ),
        ), "same-node", 12,
        'to     = "tapping"',
        "[[element]] \"impulse line\": from and to are the same node 'tapping'; name two different nodes",
    ),
    Fault(
        "at-ground", (
            (
                'at         = "gauge"',
                'at         = "ground"',
            ),
        ), "same-node", 20,
        'at         = "ground"',
        '[[element]] "gauge chamber": at is ground; name a node of the rig',
    ),
    Fault(
        "at-and-from", (
            (
                'at         = "gauge"',
                'at         = "gauge"\nfrom       = "tapping"',
            ),
        ), "bad-place", 20,
        'at         = "gauge"',
        "[[element]] \"gauge chamber\": at stands beside from or to; at is short for from = …, "
        "to = ground; use one",
    ),
    Fault(
        "both", (
            (
                'compliance = "3.1e-12 m^3/Pa ± 8 %"\n',
                'compliance = "3.1e-12 m^3/Pa ± 8 %"\nvolume     = "5 cm^3"\nmedium     = "oil"\n',
            ),
        ), "too-many-values", 23,
        'medium     = "oil"',
        "[[element]] \"gauge chamber\": medium stands beside compliance; state compliance or "
        "volume and medium",
    ),
    Fault(
        "both2", (
            (
                'compliance = "3.1e-12 m^3/Pa ± 8 %"\n',
                'compliance = "3.1e-12 m^3/Pa ± 8 %"\nvolume     = "5 cm^3"\n',
            ),
        ), "too-many-values", 22,
        'volume     = "5 cm^3"',
        "[[element]] \"gauge chamber\": volume stands beside compliance; state compliance or "
        "volume and medium",
    ),
    Fault(
        "grounded", (
            (
                "[[drive]]",
                "[[element]]\nname = \"m\"\nkind = \"mass\"\nfrom = \"a\"\nto = \"b\"\nmass = \"1 kg\"\n\n[[drive]]",
            ),
        ), "needs-ground", 27,
        'to = "b"',
        '[[element]] "m": its other end is ground by nature; write at = "…" (or to = "ground")',
    ),
    Fault(
        "two-domains", (
            (
                "[[drive]]",
                "[[element]]\nname = \"s\"\nkind = \"spring\"\nat = \"gauge\"\nstiffness = \"1 N/m\"\n\n[[drive]]",
            ),
        ), "two-domains", 26,
        'at = "gauge"',
        "[[element]] \"s\": node 'gauge' is translation here, but fluid at 'impulse line'; a "
        "node belongs to one domain; join domains by a coupler",
    ),
    Fault(
        "drive-domain", (
            (
                'imposes = "pressure"',
                'imposes = "voltage"',
            ),
        ), "two-domains", 25,
        'imposes = "voltage"',
        "[[drive]] \"line pressure\": node 'tapping' is electrical here, but fluid at 'impulse "
        "line'; a node belongs to one domain; join domains by a coupler",
    ),
    Fault(
        "loose", (
            (
                'at         = "gauge"',
                'at         = "gague"',
            ),
        ), "loose-node", 20,
        'at         = "gague"',
        "[[element]] \"gauge chamber\": node 'gague' is a loose end: nothing else touches it; "
        "did you mean 'gauge'?",
    ),
    Fault(
        "drive-loose", (
            (
                'at      = "tapping"',
                'at      = "taping"',
            ),
        ), "unknown-node", 26,
        'at      = "taping"',
        "[[drive]] \"line pressure\": no element touches node 'taping'; did you mean 'tapping'?",
    ),
    Fault(
        "imposes-unknown", (
            (
                'imposes = "pressure"',
                'imposes = "presure"',
            ),
        ), "unknown-quantity", 25,
        'imposes = "presure"',
        "[[drive]] \"line pressure\": imposes = 'presure' is not known; did you mean 'pressure'?",
    ),
    Fault(
        "of-unknown", (
            (
                'of      = "pressure"',
                'of      = "speed"',
            ),
        ), "unknown-quantity", 31,
        'of      = "speed"',
        "[[reading]] \"gauge pressure\": of = 'speed' is not known; choose one of: velocity, "
        "angular velocity, voltage, pressure, temperature, force, torque, current, flow, "
        "volume flow, heat flow, displacement, angle, charge, volume, acceleration, angular "
        "acceleration, level",
    ),
    Fault(
        "through-unknown", (
            (
                'of      = "pressure"\nat      = "gauge"',
                'of      = "flow"\nthrough = "impulse lin"',
            ),
        ), "unknown-element", 32,
        'through = "impulse lin"',
        "[[reading]] \"gauge pressure\": through = 'impulse lin' is not known; did you mean "
        "'impulse line'?",
    ),
    Fault(
        "through-missing", (
            (
                'of      = "pressure"\nat      = "gauge"',
                'of      = "flow"\nat      = "gauge"',
            ),
        ), "missing-key", 29,
        "[[reading]]",
        '[[reading]] "gauge pressure": through is missing; write through = "…"',
    ),
    Fault(
        "across-through", (
            (
                'of      = "pressure"\nat      = "gauge"',
                'of      = "pressure"\nthrough = "impulse line"',
            ),
        ), "bad-place", 32,
        'through = "impulse line"',
        "[[reading]] \"gauge pressure\": pressure is read between nodes, not through an "
        "element; write at = \"node\", or from and to",
    ),
    Fault(
        "shared-unknown", (
            (
                '"4.00 mm ± 0.05 mm"',
                '"= tube_bor"',
            ),
            (
                "",
                '\n[value.tube_bore]\nvalue = "4 mm"\n',
            ),
        ), "unknown-value", 13,
        'bore   = "= tube_bor"',
        "[[element]] \"impulse line\": bore = \"= tube_bor\" names no [value.tube_bor]; did you "
        "mean 'tube_bore'?",
    ),
    Fault(
        "shared-unused", (
            (
                "",
                '\n[value.tube_bore]\nvalue = "4 mm"\n',
            ),
        ), "unused-value", 35,
        "[value.tube_bore]",
        "[value.tube_bore]: the value 'tube_bore' is used nowhere; use it, as bore = \"= "
        "tube_bore\", or take the table out",
    ),
    Fault(
        "shared-wrong", (
            (
                '"4.00 mm ± 0.05 mm"',
                '"= b"',
            ),
            (
                "",
                '\n[value.b]\nvalue = "4 kg"\n',
            ),
        ), "wrong-unit", 36,
        'value = "4 kg"',
        "[value.b]: value is in m; 'kg' is a mass; write it as value = \"1.00 m ± 1 %\"",
    ),
    Fault(
        "shared-empty", (
            (
                '"4.00 mm ± 0.05 mm"',
                '"= b"',
            ),
            (
                "",
                '\n[value.b]\nvalu = "4 kg"\n',
            ),
        ), "unknown-key", 36,
        'valu = "4 kg"',
        "[value.b]: key 'valu' is not known here; did you mean 'value'?",
    ),
    Fault(
        "friction", (
            (
                'medium = "oil"',
                'medium = "oil"\nfriction = "turbulent"',
            ),
        ), "unknown-word", 16,
        'friction = "turbulent"',
        "[[element]] \"impulse line\": friction = 'turbulent' is not known; choose one of: "
        "oscillating, steady, plug",
    ),
    Fault(
        "known", (
            (
                'channel = "p_line"',
                'channel = "p_line"\nknown = "guessed"',
            ),
        ), "unknown-word", 28,
        'known = "guessed"',
        "[[drive]] \"line pressure\": known = 'guessed' is not known; choose one of: measured, commanded",
    ),
    Fault(
        "between", (
            (
                'channel = "p_line"',
                'channel = "p_line"\nbetween = "linear"',
            ),
        ), "unknown-word", 28,
        'between = "linear"',
        "[[drive]] \"line pressure\": between = 'linear' is not known; choose one of: held, "
        "ramped, band-limited",
    ),
    Fault(
        "ratio0", (
            (
                "[[drive]]",
                "[[element]]\nname = \"l\"\nkind = \"lever\"\nprimary = \"a\"\nsecondary = \"b\"\nratio = "
                "0\n\n[[drive]]",
            ),
        ), "zero-ratio", 28,
        "ratio = 0",
        '[[element]] "l": ratio = 0 must not be 0; write the ratio, negative if it turns',
    ),
    Fault(
        "coupler-from", (
            (
                "[[drive]]",
                '[[element]]\nname = "l"\nkind = "lever"\nfrom = "a"\nto = "b"\nratio = 2\n\n[[drive]]',
            ),
        ), "unknown-key", 26,
        'from = "a"',
        "[[element]] \"l\": key 'from' is not known here; choose one of: name, kind, primary, "
        "secondary, ratio",
    ),
    Fault(
        "port3", (
            (
                "[[drive]]",
                "[[element]]\nname = \"l\"\nkind = \"lever\"\nprimary = [\"a\",\"b\",\"c\"]\nsecondary = \"b\"\nratio "
                "= 2\n\n[[drive]]",
            ),
        ), "bad-place", 26,
        'primary = ["a","b","c"]',
        '[[element]] "l": primary has 3 nodes; write a node or a pair ["node", "other"]',
    ),
    Fault(
        "port-same", (
            (
                "[[drive]]",
                "[[element]]\nname = \"l\"\nkind = \"lever\"\nprimary = [\"a\",\"a\"]\nsecondary = \"b\"\nratio = "
                "2\n\n[[drive]]",
            ),
        ), "same-node", 26,
        'primary = ["a","a"]',
        "[[element]] \"l\": primary begins and ends at 'a'; name two different nodes",
    ),
    Fault(
        "coupler-loose", (
            (
                "[[drive]]",
                "[[element]]\nname = \"p\"\nkind = \"piston\"\nprimary = \"gauge\"\nsecondary = \"rod\"\narea = "
                "\"1 cm^2\"\n\n[[drive]]",
            ),
        ), "loose-node", 27,
        'secondary = "rod"',
        "[[element]] \"p\": node 'rod' is a loose end: nothing else touches it; choose one of: "
        "gauge, tapping",
    ),
    Fault(
        "coupler-domain", (
            (
                "[[drive]]",
                "[[element]]\nname = \"p\"\nkind = \"piston\"\nprimary = \"rod\"\nsecondary = \"gauge\"\narea = "
                "\"1 cm^2\"\n\n[[drive]]",
            ),
        ), "two-domains", 27,
        'secondary = "gauge"',
        "[[element]] \"p\": node 'gauge' is translation here, but fluid at 'impulse line'; a "
        "node belongs to one domain; join domains by a coupler",
    ),
    Fault(
        "log-key", (
            (
                "",
                '\n[log]\ntimes = "t"\n',
            ),
        ), "unknown-key", 36,
        'times = "t"',
        "[log]: key 'times' is not known here; did you mean 'time'?",
    ),
    Fault(
        "log-unit", (
            (
                "",
                '\n[log]\nunits = { p_line = "kPascals", p_gauge = "kPa" }\n',
            ),
        ), "unknown-unit", 36,
        'units = { p_line = "kPascals", p_gauge = "kPa" }',
        "[log]: unit 'kPascals' is not known; did you mean 'kPa'?",
    ),
    Fault(
        "log-skew", (
            (
                "",
                '\n[log]\nskew = { p_gauge = "12 mm" }\n',
            ),
        ), "wrong-unit", 36,
        'skew = { p_gauge = "12 mm" }',
        "[log]: skew.p_gauge is in s; 'mm' is a length; write it as skew.p_gauge = \"1.00 s ± 1 %\"",
    ),
    Fault(
        "log-rate", (
            (
                "",
                '\n[log]\nrate = "fast"\n',
            ),
        ), "bad-value", 36,
        'rate = "fast"',
        "[log]: rate = 'fast' is not a value; write it as rate = \"1.00 Hz ± 1 %\"",
    ),
    Fault(
        "log-time", (
            (
                "",
                "\n[log]\ntime = 3\n",
            ),
        ), "missing-key", 36,
        "time = 3",
        '[log]: time = 3 is not a name; write time = "…"',
    ),
    Fault(
        "fit-form", (
            (
                "",
                '\n[fit]\nform = "second-ordr"\n',
            ),
        ), "unknown-form", 36,
        'form = "second-ordr"',
        "[fit]: form 'second-ordr' is not known; choose one of: first-order, "
        "first-order-rate, second-order, second-order-rate, second-order-zero, "
        "second-order-highpass, third-order, third-order-rate, rational-m/n (m ≤ n ≤ 6)",
    ),
    Fault(
        "fit-dead", (
            (
                "",
                '\n[fit]\ndead_time = "yes"\n',
            ),
        ), "bad-value", 36,
        'dead_time = "yes"',
        "[fit]: dead_time = 'yes' is neither true nor false; write dead_time = true",
    ),
    Fault(
        "agr-cov", (
            (
                "",
                "\n[agreement]\ncoverage = 95\n",
            ),
        ), "bad-value", 36,
        "coverage = 95",
        "[agreement]: coverage = 95 is not a probability from 0.5 to 1; write coverage = 0.95",
    ),
    Fault(
        "agr-rule", (
            (
                "",
                '\n[agreement]\nrule = "strict"\n',
            ),
        ), "unknown-word", 36,
        'rule = "strict"',
        "[agreement]: rule = 'strict' is not known; choose one of: simple, guarded",
    ),
    Fault(
        "agr-guard", (
            (
                "",
                '\n[agreement]\nrule = "guarded"\n',
            ),
        ), "rule-without-limits", 36,
        'rule = "guarded"',
        "[agreement]: rule = \"guarded\" needs `within` or [limits]; state what difference "
        "matters, or take the rule out",
    ),
    Fault(
        "agr-within", (
            (
                "",
                '\n[agreement]\nwithin = { gain = "2 kPa" }\n',
            ),
        ), "bad-value", 36,
        'within = { gain = "2 kPa" }',
        "[agreement]: within gain = '2 kPa' is not a percentage; write gain = \"5 %\"",
    ),
    Fault(
        "agr-within-name", (
            (
                "",
                '\n[agreement]\nwithin = { gian = "2 %" }\n',
            ),
        ), "unknown-parameter", 36,
        'within = { gian = "2 %" }',
        "[agreement]: 'gian' is not a parameter; did you mean 'gain'?",
    ),
    Fault(
        "lim-name", (
            (
                "",
                '\n[limits]\nnatural_freq = ">= 120 Hz"\n',
            ),
        ), "unknown-parameter", 36,
        'natural_freq = ">= 120 Hz"',
        "[limits]: 'natural_freq' is not a parameter; did you mean 'natural_frequency'?",
    ),
    Fault(
        "lim-text", (
            (
                "",
                '\n[limits]\nnatural_frequency = "120 Hz"\n',
            ),
        ), "bad-value", 36,
        'natural_frequency = "120 Hz"',
        "[limits]: '120 Hz' is not a limit; write \">= 120 Hz\", \"0.6 to 0.8\" or \"2.00 mV/kPa "
        "within 1 %\"",
    ),
    Fault(
        "lim-unit", (
            (
                "",
                '\n[limits]\nnatural_frequency = ">= 120 mm"\n',
            ),
        ), "wrong-unit", 36,
        'natural_frequency = ">= 120 mm"',
        "[limits]: natural_frequency is in rad/s; 'mm' is a length; write it as "
        "natural_frequency = \"1.00 rad/s ± 1 %\"",
    ),
    Fault(
        "lim-down", (
            (
                "",
                '\n[limits]\ndamping_ratio = "0.8 to 0.6"\n',
            ),
        ), "bad-value", 36,
        'damping_ratio = "0.8 to 0.6"',
        "[limits]: '0.8 to 0.6' runs downwards; write the lower limit first",
    ),
    Fault(
        "lim-num", (
            (
                "",
                "\n[limits]\ndamping_ratio = 0.7\n",
            ),
        ), "bad-value", 36,
        "damping_ratio = 0.7",
        "[limits]: '0.7' is not a limit; write \">= 120 Hz\", \"0.6 to 0.8\" or \"2.00 mV/kPa "
        "within 1 %\"",
    ),
    Fault(
        "sys-of", (
            (
                "",
                '\n[[systematic]]\nof = "gian"\nchannel = "p"\nvalue = "0 ± 0.3 %"\n',
            ),
        ), "unknown-word", 36,
        'of = "gian"',
        "[[systematic]] number 1: of = 'gian' is not known; did you mean 'gain'?",
    ),
    Fault(
        "sys-value", (
            (
                "",
                '\n[[systematic]]\nof = "gain"\nchannel = "p"\n',
            ),
        ), "missing-key", 35,
        "[[systematic]]",
        '[[systematic]] number 1: value is missing; write value = "0 ± 0.3 %"',
    ),
    Fault(
        "sys-unit", (
            (
                "",
                '\n[[systematic]]\nof = "gain"\nchannel = "p"\nvalue = "0 ± 3 kPa"\n',
            ),
        ), "wrong-unit", 38,
        'value = "0 ± 3 kPa"',
        "[[systematic]] number 1: value is a plain number; 'kPa' is a pressure; write it as "
        "value = \"1.00 ± 1 %\"",
    ),
    Fault(
        "static-ref", (
            (
                'title = "Impulse line"',
                'title = "Impulse line"\nstatic_pressure = "2 bar"',
            ),
        ), "which-pressure", 3,
        'static_pressure = "2 bar"',
        "[rig]: static_pressure = '2 bar' does not say against what; write \"2.0 bar, "
        "absolute\" or \"1.0 bar, gauge\"",
    ),
    Fault(
        "static-gauge", (
            (
                'title = "Impulse line"',
                'title = "Impulse line"\nstatic_pressure = "2 bar, gauge"',
            ),
        ), "missing-pressure", 3,
        'static_pressure = "2 bar, gauge"',
        "[rig]: a gauge pressure needs ambient_pressure; write ambient_pressure = \"1013 mbar "
        "± 20 mbar\" in [rig]",
    ),
    Fault(
        "gravity", (
            (
                'title = "Impulse line"',
                'title = "Impulse line"\ngravity = "9.81 m/s"',
            ),
        ), "wrong-unit", 3,
        'gravity = "9.81 m/s"',
        "[rig]: gravity is in m/s^2; 'm/s' is a velocity; write it as gravity = \"1.00 m/s^2 ± 1 %\"",
    ),
    Fault(
        "title", (
            (
                'title = "Impulse line"',
                "title = 3",
            ),
        ), "missing-key", 2,
        "title = 3",
        '[rig]: title = 3 is not a name; write title = "…"',
    ),
    Fault(
        "water-T", (
            (
                'medium = "oil"',
                'medium = "water"',
            ),
        ), "missing-temperature", 15,
        'medium = "water"',
        "[[element]] \"impulse line\": the density of 'water' depends on temperature, and none "
        "is stated; write temperature = \"20 °C ± 2 K\" in the medium or in [rig]",
    ),
    Fault(
        "gas-p", (
            (
                'compliance = "3.1e-12 m^3/Pa ± 8 %"\n',
                'volume     = "5 cm^3"\nmedium     = "n"\n',
            ),
            (
                "",
                '\n[medium.n]\ngas = "nitrogen"\n',
            ),
        ), "missing-pressure", 36,
        "[medium.n]",
        "[medium.n]: the bulk_modulus of gas 'n' depends on pressure, and none is stated; "
        "write static_pressure = \"2.0 bar, absolute\" in [rig]",
    ),
    Fault(
        "gas-name", (
            (
                "",
                '\n[medium.n]\ngas = "nitrogn"\n',
            ),
        ), "unknown-gas", 36,
        'gas = "nitrogn"',
        "[medium.n]: gas = 'nitrogn' is not known; did you mean 'nitrogen'?",
    ),
    Fault(
        "gas-process", (
            (
                "",
                '\n[medium.n]\ngas = "nitrogen"\nprocess = "adiabat"\n',
            ),
        ), "unknown-process", 37,
        'process = "adiabat"',
        "[medium.n]: process = 'adiabat' is not known; did you mean 'adiabatic'?",
    ),
    Fault(
        "single-el", (
            (
                "[[drive]]",
                "[drive]",
            ),
        ), "bad-table", 23,
        "[drive]",
        "[drive]: drive is not a list of tables; write [[drive]]",
    ),
    Fault(
        "dotted", (
            (
                "[medium.oil]\ndensity   = \"871 kg/m^3 ± 0.5 %\"\nviscosity = \"0.0296 Pa*s, u = 0.0006 "
                "Pa*s\"",
                '[medium]\noil.density = "871 kg"\noil.viscosity = "0.0296 Pa*s"',
            ),
        ), "wrong-unit", 5,
        'oil.density = "871 kg"',
        "[medium.oil]: density is in kg/m^3; 'kg' is a mass; write it as density = \"1.00 kg/m^3 ± 1 %\"",
    ),
    Fault(
        "inline", (
            (
                "[medium.oil]\ndensity   = \"871 kg/m^3 ± 0.5 %\"\nviscosity = \"0.0296 Pa*s, u = 0.0006 "
                "Pa*s\"",
                '[medium]\noil = { density = "871 kg", viscosity = "0.0296 Pa*s" }',
            ),
        ), "wrong-unit", 5,
        'oil = { density = "871 kg", viscosity = "0.0296 Pa*s" }',
        "[medium.oil]: density is in kg/m^3; 'kg' is a mass; write it as density = \"1.00 kg/m^3 ± 1 %\"",
    ),
    Fault(
        "multiline", (
            (
                'title = "Impulse line"',
                'title = """Impulse\n[[element]]\nbore = "x"\nline"""',
            ),
            (
                "4.00 mm ± 0.05 mm",
                "4.00 kg",
            ),
        ), "wrong-unit", 16,
        'bore   = "4.00 kg"',
        "[[element]] \"impulse line\": bore is in m; 'kg' is a mass; write it as bore = \"1.00 m ± 1 %\"",
    ),
    Fault(
        "inf", (
            (
                "4.00 mm ± 0.05 mm",
                "1e400 mm",
            ),
        ), "bad-value", 13,
        'bore   = "1e400 mm"',
        "[[element]] \"impulse line\": bore = '1e400 mm' is not finite; write a number that a "
        "float can hold",
    ),
    Fault(
        "nanbare", (
            (
                "[[drive]]",
                "[[element]]\nname = \"l\"\nkind = \"lever\"\nprimary = \"a\"\nsecondary = \"b\"\nratio = "
                "nan\n\n[[drive]]",
            ),
        ), "bad-value", 28,
        "ratio = nan",
        "[[element]] \"l\": ratio = 'nan' is not finite; write a number that a float can hold",
    ),
    Fault(
        "huge", (
            (
                "± 0.05 mm",
                "± 1e400 mm",
            ),
        ), "bad-value", 13,
        'bore   = "4.00 mm ± 1e400 mm"',
        "[[element]] \"impulse line\": bore = '4.00 mm ± 1e400 mm' is not finite; write a "
        "number that a float can hold",
    ),
    Fault(
        "spaced-header", (
            (
                '[[element]]\nname   = "impulse',
                '[[ element ]] # "]]"\nname   = "impulse',
            ),
            (
                "4.00 mm ±",
                "4.00 kg ±",
            ),
        ), "wrong-unit", 13,
        'bore   = "4.00 kg ± 0.05 mm"',
        "[[element]] \"impulse line\": bore is in m; 'kg' is a mass; write it as bore = \"1.00 m ± 1 %\"",
    ),
    Fault(
        "quoted-medium", (
            (
                "[medium.oil]",
                '[medium."oil"]',
            ),
            (
                "871 kg/m^3 ± 0.5 %",
                "871 kg",
            ),
        ), "wrong-unit", 5,
        'density   = "871 kg"',
        "[medium.oil]: density is in kg/m^3; 'kg' is a mass; write it as density = \"1.00 kg/m^3 ± 1 %\"",
    ),
    Fault(
        "value-dot", (
            (
                '"4.00 mm ± 0.05 mm"',
                '"= oil.density"',
            ),
            (
                "",
                '\n[value."oil.density"]\nvalue = "4 mm"\n',
            ),
        ), "bad-name", 35,
        '[value."oil.density"]',
        "[value.oil.density]: the value's name 'oil.density' has a point in it; write it with _ instead",
    ),
    Fault(
        "through-wrong-domain", (
            (
                'of      = "pressure"\nat      = "gauge"',
                'of      = "current"\nthrough = "impulse line"',
            ),
        ), "two-domains", 31,
        'of      = "current"',
        "[[reading]] \"gauge pressure\": no current goes through 'impulse line', which is "
        "fluid; read flow or volume flow or volume",
    ),
    Fault(
        "through-two", (
            (
                'of      = "pressure"\nat      = "gauge"',
                'of      = "flow"\nthrough = "impulse line"',
            ),
            (
                'name    = "line pressure"',
                'name    = "impulse line"',
            ),
        ), "doubled-name", 32,
        'through = "impulse line"',
        "[[reading]] \"gauge pressure\": through = 'impulse line' is the name of an element "
        "and of a drive; give one of them another name",
    ),
    Fault(
        "percent-of-celsius", (
            (
                'title = "Impulse line"',
                'title = "Impulse line"\ntemperature = "23 °C ± 1 %"',
            ),
        ), "bad-tolerance", 3,
        'temperature = "23 °C ± 1 %"',
        '[rig]: temperature: a percentage of °C has no meaning; write "23 °C ± 1 K"',
    ),
    Fault(
        "within-not-a-number", (
            (
                "",
                '\n[agreement]\nwithin = { gain = "5e %" }\n',
            ),
        ), "bad-value", 36,
        'within = { gain = "5e %" }',
        "[agreement]: within gain = '5e %' is not a percentage; write gain = \"5 %\"",
    ),
    Fault(
        "limit-negative-width", (
            (
                "",
                '\n[limits]\ngain = "2 mV/kPa within -1 %"\n',
            ),
        ), "bad-value", 36,
        'gain = "2 mV/kPa within -1 %"',
        "[limits]: '2 mV/kPa within -1 %' is not a limit; write \">= 120 Hz\", \"0.6 to 0.8\" or "
        "\"2.00 mV/kPa within 1 %\"",
    ),
    Fault(
        "limit-two-units", (
            (
                "",
                '\n[limits]\ngain = "2 mV/kPa to 3 mV"\n',
            ),
        ), "wrong-unit", 36,
        'gain = "2 mV/kPa to 3 mV"',
        "[limits]: '2 mV/kPa to 3 mV' has limits of two kinds; write both in one unit",
    ),
    Fault(
        "limit-uncertain", (
            (
                "",
                '\n[limits]\nnatural_frequency = ">= 120 Hz ± 1 Hz"\n',
            ),
        ), "bad-value", 36,
        'natural_frequency = ">= 120 Hz ± 1 Hz"',
        "[limits]: '120 Hz ± 1 Hz' states an uncertainty; a limit has none; write the limit alone",
    ),
    Fault(
        "medium-property-shared", (
            (
                '"871 kg/m^3 ± 0.5 %"',
                '"= rhoo"',
            ),
            (
                "",
                '\n[value.rho]\nvalue = "871 kg/m^3"\n',
            ),
        ), "unknown-value", 5,
        'density   = "= rhoo"',
        "[medium.oil]: density = \"= rhoo\" names no [value.rhoo]; did you mean 'rho'?",
    ),
    Fault(
        "not-a-list-inside", (
            (
                "[rig]\n",
                "element = [1]\n[rig]\n",
            ),
            (
                "[[element]]",
                "[[part]]",
            ),
        ), "unknown-table", 9,
        "[[part]]",
        "[[part]] number 1: a table 'part' is not known; choose one of: rig, medium, value, "
        "element, drive, reading, log, fit, agreement, limits, systematic",
    ),
    Fault(
        "node-number", (
            (
                'at         = "gauge"',
                "at         = 5",
            ),
        ), "missing-node", 20,
        "at         = 5",
        '[[element]] "gauge chamber": at = 5 is not a node; write at = "node"',
    ),
    Fault(
        "date", (
            (
                '"4.00 mm ± 0.05 mm"',
                "2020-01-01",
            ),
        ), "bad-value", 13,
        "bore   = 2020-01-01",
        "[[element]] \"impulse line\": bore = datetime.date(2020, 1, 1) is not a value; write "
        "it as bore = \"1.00 m ± 1 %\"",
    ),
)
