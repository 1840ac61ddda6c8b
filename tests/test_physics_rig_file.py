"""Rig files that are sound: what each way of writing means, where it stands, and no text that ends in a traceback."""

from __future__ import annotations

import math
import re
import tomllib
from pathlib import Path

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from rigtally.errors import RigError
from rigtally.physics.kinds import KINDS, SAME
from rigtally.physics.prediction import predict
from rigtally.physics.rig import GROUND, Port, Rig
from rigtally.physics.rig_file import load_rig
from rigtally.physics.rig_lines import find_lines
from rigtally.physics.starter import starter, starter_kinds
from rigtally.physics.write_back import save_rig
from rigtally.quantities.uncertain import Uncertain

ROOT3 = math.sqrt(3.0)
PLACE = Path(__file__).parent
LINE = starter("impulse-line")


def read(text: str, folder: Path) -> Rig:
    file = folder / "rig.toml"
    file.write_text(text, encoding="utf-8")
    return load_rig(file)


@pytest.mark.parametrize("kind", starter_kinds())
def test_starters_are_commented_and_exact_about_themselves(kind: str, tmp_path: Path) -> None:
    """Each starter is read; it has a title, comments, a caution, and a channel for each drive and reading."""
    rig = read(starter(kind), tmp_path)
    assert rig.title
    assert rig.text.count("# ") >= 4
    assert all(place.channel for place in (*rig.drives, *rig.readings))
    hurts = {"fluid", "rotation", "electrical"} & {d for e in rig.elements for d in KINDS[e.kind].domains}
    assert not hurts or "CAUTION" in rig.text
    toleranced = [q for q in rig.values.values() if q.u > 0]
    assert len(toleranced) >= len(rig.elements) - 1


def test_starters_cover_every_domain_and_coupling() -> None:
    """At least ten kinds, and among them all five domains."""
    words = {element["kind"] for k in starter_kinds() for element in tomllib.loads(starter(k))["element"]}
    assert len(starter_kinds()) >= 10
    assert {domain for word in words for domain in KINDS[word].domains} >= {
        "translation", "rotation", "electrical", "fluid", "thermal",
    }  # fmt: skip


# One file for each kind of element: keys written by hand from the rig file's page.
WRITTEN = {
    "mass": 'mass = "1 kg"', "spring": 'stiffness = "1 N/mm"', "damper": 'damping = "1 N*s/m"',
    "coil-spring": 'wire = "1 mm"\ncoil_diameter = "9 mm"\nturns = 6\nshear_modulus = "80 GPa"',
    "cantilever": 'length = "9 cm"\nwidth = "1 cm"\nthickness = "1 mm"\nyoungs_modulus = "200 GPa"',
    "inertia": 'mass = "1 kg"\ndiameter = "0.1 m"', "torsion-spring": 'stiffness = "1 N*m/rad"',
    "rotary-damper": 'damping = "1 N*m*s/rad"',
    "torsion-bar": 'diameter = "5 mm"\nlength = "0.2 m"\nshear_modulus = "80 GPa"',
    "resistor": 'resistance = "1 kohm"', "capacitor": 'capacitance = "1 uF"', "inductor": 'inductance = "1 mH"',
    "fluid-resistance": 'resistance = "1e9 Pa*s/m^3"', "fluid-inertance": 'inertance = "1e6 Pa*s^2/m^3"',
    "chamber": 'volume = "1 L"\nmedium = "oil"', "open-tank": 'diameter = "5 cm"\nmedium = "oil"',
    "laminar-line": 'bore = "4 mm"\nlength = "3 m"\nmedium = "oil"\nfriction = "steady"',
    "orifice": 'area = "1 mm^2"\ndischarge_coefficient = 0.62\nmedium = "oil"\nflow = "1 L/min"',
    "thermal-resistance": 'resistance = "2 K/W"', "heat-capacity": 'capacity = "20 J/K"',
    "lever": "ratio = -2", "gear": 'ratio = "0.1"', "transformer": "ratio = 3", "rack": 'radius = "2 cm"',
    "piston": 'area = "1 cm^2"', "bellows": 'area = "1 cm^2"\nstiffness = "2 N/mm"', "motor": 'constant = "0.05 N*m/A"',
}  # fmt: skip
ACROSS = {
    "translation": "velocity", "rotation": "angular velocity", "electrical": "voltage", "fluid": "pressure",
    "thermal": "temperature", SAME: "voltage",
}  # fmt: skip


def one_element(kind: str) -> str:
    """A file with that element alone, driven and read."""
    domains = KINDS[kind].domains
    place = 'primary = "a"\nsecondary = "b"' if KINDS[kind].coupler else 'at = "a"'
    extra = (
        '[[element]]\nname = "earth"\nkind = "resistor"\nat = "a"\nresistance = "1 ohm"\n'
        if SAME in domains
        else ""
    )
    return (
        '[medium.oil]\ndensity = "870 kg/m^3 ± 1 %"\nviscosity = "0.03 Pa*s"\nbulk_modulus = "1.4 GPa ± 5 %"\n'
        f'[[element]]\nname = "it"\nkind = "{kind}"\n{place}\n{WRITTEN[kind]}\n{extra}'
        f'[[drive]]\nname = "in"\nimposes = "{ACROSS[domains[0]]}"\nat = "a"\n'
        f'[[reading]]\nname = "out"\nof = "{ACROSS[domains[-1]]}"\nat = "{"b" if len(domains) > 1 else "a"}"\n'
    )


@pytest.mark.parametrize("kind", KINDS)
def test_every_kind_is_read_with_its_values(kind: str, tmp_path: Path) -> None:
    """Each kind by the keys of the page: every value under its key, in SI, with its ports."""
    rig = read(one_element(kind), tmp_path)
    element = rig.elements[0]
    keys = re.findall(r"^(\w+) =", WRITTEN[kind], re.MULTILINE)
    assert set(WRITTEN) == set(KINDS)
    own = {key for key in element.values if rig.labels[element.values[key]][0] == "it"}
    assert own == set(keys) - {"medium", "friction"}
    assert all(name in rig.values for name in element.values.values())
    assert element.ports == ((Port("a"), Port("b")) if KINDS[kind].coupler else (Port("a"),))
    assert element.medium == ("oil" if "medium" in keys else "")


@pytest.mark.parametrize("kind", KINDS)
def test_a_key_less_is_refused_with_the_kind_s_table(kind: str, tmp_path: Path) -> None:
    """Each needed key taken out is asked for by name, with the line of the element's table."""
    optional = {*KINDS[kind].optional, *KINDS[kind].words}
    for row in WRITTEN[kind].split("\n"):
        key = row.split(" = ")[0]
        if key in optional:
            continue
        text = one_element(kind).replace(row + "\n", "", 1)
        with pytest.raises(RigError, match=r"rig\.toml:5: \[\[element\]\] \"it\".* is missing") as caught:
            read(text, tmp_path)
        assert key in caught.value.line()


def test_values_are_si_with_their_owner(tmp_path: Path) -> None:
    """The page's example: each value once, in SI, with its label."""
    rig = read(LINE, tmp_path)
    assert rig.values["impulse line.bore"].value == pytest.approx(4e-3)
    assert rig.values["impulse line.bore"].u == pytest.approx(5e-5 / ROOT3)
    assert rig.values["oil.viscosity"].u == pytest.approx(6e-4)
    assert rig.labels["oil.density"] == ("oil", "density")
    line, chamber = rig.elements
    assert line.ports == (Port("tapping", "gauge"),)
    assert chamber.ports == (Port("gauge", GROUND),)
    assert line.values == {
        "bore": "impulse line.bore", "length": "impulse line.length", "density": "oil.density",
        "viscosity": "oil.viscosity",
    }  # fmt: skip
    assert rig.sha256
    assert rig.drives[0].between == "ramped"
    assert rig.text == LINE


def test_a_shared_value_is_one_input(tmp_path: Path) -> None:
    """A value, or a medium's property, that is used in several places is in the rig once."""
    text = LINE.replace('bore = "4.00 mm ± 0.05 mm"', 'bore = "= tube"').replace(
        '"871 kg/m^3 ± 0.5 %"', '"= rho"', 1
    )
    text = text.replace('of      = "pressure"', 'of      = "level"\nmedium  = "oil"')
    text += '\n[value.tube]\nvalue = "4.00 mm ± 0.05 mm"\n[value.rho]\nvalue = "871 kg/m^3 ± 0.5 %"\n'
    rig = read(text, tmp_path)
    assert rig.elements[0].values["bore"] == "tube"
    assert {"tube", "rho"} <= set(rig.values)
    assert not {"impulse line.bore", "oil.density"} & set(rig.values)
    own = predict(read(LINE.replace('of      = "pressure"', 'of      = "level"\nmedium  = "oil"'), tmp_path))
    shared = predict(rig)
    for name, parameter in own.parameters.items():
        assert shared.parameters[name].value == pytest.approx(parameter.value, rel=1e-12)
        assert shared.parameters[name].u == pytest.approx(parameter.u, rel=1e-9)


def test_a_shared_value_may_serve_a_level_alone(tmp_path: Path) -> None:
    """A density that only a reading of level needs is used."""
    text = LINE.replace('of      = "pressure"', 'of      = "level"\nmedium  = "brine"')
    text += '[medium.brine]\ndensity = "= rho"\n[value.rho]\nvalue = "1030 kg/m^3 ± 1 %"\n'
    gain = predict(read(text, tmp_path)).parameters["gain"]
    assert gain.value == pytest.approx(1 / (1030 * 9.80665), rel=1e-12)
    assert gain.u / gain.value == pytest.approx(0.01 / ROOT3, rel=1e-9)


def test_settings_media_and_options(tmp_path: Path) -> None:
    """Static pressure absolute or gauge, temperature, gases, the log, the fit, the agreement and the limits."""
    text = (
        '[rig]\nstatic_pressure = "1.0 bar ± 0.1 bar, gauge"\nambient_pressure = "1000 mbar"\n'
        'temperature = "23 °C, u = 1 K"\ngravity = "9.81 m/s^2"\n'
        '[medium.fill]\ngas = "nitrogen"\nprocess = "isothermal"\ntemperature = "40 °C ± 2 K"\n'
        '[[element]]\nname = "line"\nkind = "laminar-line"\nfrom = "a"\nto = "b"\nbore = "2 mm"\nlength = "1 m"\n'
        'medium = "fill"\n[[element]]\nname = "cup"\nkind = "chamber"\nat = "b"\nvolume = "50 cm^3"\nmedium = "fill"\n'
        '[[drive]]\nname = "p"\nimposes = "pressure"\nat = "a"\nknown = "commanded"\n'
        '[[reading]]\nname = "q"\nof = "volume flow"\nthrough = "line"\n'
        '[log]\ntime = "t"\nrate = "1 kHz"\nunits = { p = "kPa" }\nskew = { p = "12 µs, u = 1 µs" }\n'
        '[fit]\nform = "second-order"\ndead_time = true\n'
        '[agreement]\ncoverage = 0.9\nrule = "guarded"\nwithin = { gain = "2 %" }\n'
        '[limits]\nnatural_frequency = ">= 120 Hz"\ndamping_ratio = "0.6 to 0.8"\ngain = "2.00 mV/kPa within 1 %"\n'
        'time_constant = "<= 5 ms"\n'
        '[[systematic]]\nof = "gain"\nchannel = "p"\nvalue = "0 ± 0.3 %"\nsource = "certificate 117"\n'
    )
    rig = read(text, tmp_path)
    assert rig.settings["static_pressure"].value == pytest.approx(2e5)
    assert rig.settings["static_pressure"].u == pytest.approx(1e4 / ROOT3)
    assert rig.values["fill.temperature"].value == pytest.approx(313.15)
    assert rig.media["fill"]["process"] == "isothermal"
    assert rig.settings["gravity"].value == pytest.approx(9.81)
    assert (rig.drives[0].known, rig.drives[0].between) == ("commanded", "held")
    assert rig.log["skew"]["p"].value == pytest.approx(12e-6)
    assert rig.fit == {"form": "second-order", "dead_time": True}
    assert rig.agreement == {"coverage": 0.9, "rule": "guarded", "within": {"gain": pytest.approx(0.02)}}
    assert rig.limits["natural_frequency"][:2] == (pytest.approx(240 * math.pi), None)
    assert rig.limits["damping_ratio"] == (pytest.approx(0.6), pytest.approx(0.8), "")
    assert rig.limits["gain"][:2] == (pytest.approx(1.98e-6), pytest.approx(2.02e-6))
    assert rig.limits["time_constant"] == (None, pytest.approx(5e-3), "s")
    assert rig.systematic[0]["value"].u == pytest.approx(3e-3 / ROOT3)


def test_limits_alone_are_a_rating(tmp_path: Path) -> None:
    """A file with limits and no element is read."""
    rig = read('[limits]\ndamping_ratio = "0.6 to 0.8"\n', tmp_path)
    assert (rig.elements, rig.drives, rig.readings) == ((), (), ())


SPELLED = {
    "header": '[medium.oil]\ndensity = "871 kg/m^3 ± 1 %"\nviscosity = "0.03 Pa*s"\n',
    "dotted": '[medium]\noil.density = "871 kg/m^3 ± 1 %"\noil . viscosity = "0.03 Pa*s"\n',
    "inline": '[medium]\noil = { density = "871 kg/m^3 ± 1 %", viscosity = "0.03 Pa*s" }\n',
    "quoted": '["medium".\'oil\']\n"density" = \'871 kg/m^3 ± 1 %\'\nviscosity = """0.03 Pa*s"""\n',
}


@pytest.mark.parametrize("how", SPELLED)
def test_every_spelling_of_toml_keeps_its_line(how: str, tmp_path: Path) -> None:
    """A key has its line, and its value is written back in place, however the table is spelled."""
    head = '[rig]\ntitle = """two\n[medium.oil]\n\\"\\"\\" lines"""\n# [medium.oil]\n'
    body = re.sub(r"(?s)\[medium.*?(?=\[\[element)", "", LINE)
    text = (
        head + SPELLED[how] + body.replace('[rig]\ntitle = "Oil-filled impulse line and gauge chamber"\n', "")
    )
    rig = read(text, tmp_path)
    expected = next(k for k, row in enumerate(text.split("\n"), 1) if "density" in row)
    assert find_lines(text).key("medium.oil", 0, "density") == expected
    new = {"oil.density": Uncertain(900.0, 3.0, "kg/m^3"), "impulse line.bore": Uncertain(5e-3, 1e-5, "m")}
    again = load_rig(save_rig(rig, new, tmp_path / "new.toml"))
    for name, q in new.items():
        assert again.values[name].value == pytest.approx(q.value, rel=1e-12)
        assert again.values[name].u == pytest.approx(q.u, rel=1e-3)
    assert again.title == rig.title
    changed = [a for a, b in zip(text.split("\n"), again.text.split("\n"), strict=True) if a != b]
    assert len(changed) == 2


SIGNS = st.sampled_from(list("[]{}=\"'#.,±%-+0159eE \n\\\t\u00b5\u00e9\x00\x85\u2028"))
WORDS = st.sampled_from(
    ["nan", "inf", "true", '"= x"', "1e400", "-1", "0", "mm", "ground", "at", "medium", '"', "[[element]]", "[rig]",
     "[value.x]\nvalue = 1\n", "[limits]\ngain = 3\n", '"""', "within", " to ", "1979-05-27", "kg", "**9", "u = ",
     "k = 0"]
)  # fmt: skip


@settings(max_examples=400, deadline=None, derandomize=True, suppress_health_check=list(HealthCheck))
@given(
    kind=st.sampled_from(starter_kinds()),
    changes=st.lists(
        st.tuples(st.floats(0, 1), st.integers(0, 12), st.one_of(SIGNS, WORDS, st.text(max_size=4))), min_size=1,
        max_size=4,
    ),
)  # fmt: skip
def test_damaged_file_is_read_or_refused(
    kind: str, changes: list[tuple[float, int, str]], tmp_path_factory: pytest.TempPathFactory
) -> None:
    """Whatever is done to a starter's text, it is read or refused in one line that names the file."""
    text = starter(kind)
    for where, cut, put in changes:
        at = int(where * len(text))
        text = text[:at] + put + text[at + cut :]
    file = tmp_path_factory.getbasetemp() / "damaged.toml"
    file.write_bytes(text.encode("utf-8", "surrogatepass"))
    try:
        assert load_rig(file).file == str(file)
    except RigError as refusal:
        assert refusal.line().startswith(str(file))
        assert "\n" not in refusal.line()
        assert refusal.do and refusal.code


def values_swapped() -> list[str]:
    """Every value of a starter replaced by something of another type."""
    base = LINE + '\n[log]\ntime = "t"\nunits = {}\n[fit]\ndead_time = false\n[agreement]\ncoverage = 0.95\n'
    base += '[limits]\ngain = ">= 0.9"\n[[systematic]]\nof = "time"\nvalue = "0 ± 0.3 %"\n'
    rows = base.split("\n")
    out = []
    for k, row in enumerate(rows):
        if " = " in row and not row.startswith("#"):
            for other in (
                "3",
                "true",
                "[]",
                "{}",
                "[[1]]",
                '""',
                "{ a = 1 }",
                "1979-05-27",
                "nan",
                '"%s{}"',
                '"\\u0000"',
            ):
                out.append("\n".join([*rows[:k], row.split(" = ")[0] + f" = {other}", *rows[k + 1 :]]))
    for table in (
        "rig",
        "medium",
        "value",
        "element",
        "drive",
        "reading",
        "log",
        "fit",
        "agreement",
        "limits",
        "systematic",
    ):
        out += [f"{table} = {other}\n" for other in ("3", "[]", "[1]", "{ a = 1 }", '"x"', "[{}]", "[[]]")]
    return out


def test_values_of_other_types_are_refused(tmp_path: Path) -> None:
    """A number for a word, a table for a number, a list for a table: read or refused, never a traceback."""
    refused = 0
    for text in values_swapped():
        try:
            read(text, tmp_path)
        except RigError as refusal:
            refused += 1
            assert refusal.do, refusal.line()
    assert refused > 200
