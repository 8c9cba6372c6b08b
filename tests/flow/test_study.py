"""The study file: what it gives, what it refuses, and that it survives being written and read again."""

import json
import pickle
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.constants import Boltzmann

from canonry.errors import UserError
from canonry.study import COMPARED, Study, Tolerance, load
from canonry.units import Scale

SHORTEST = """
[fluid]
potential = "lennard-jones"
[state]
density = 0.8
temperatures = [1.0]
"""
COOLANT = """
title = "A liquid"
[fluid]
potential = "lennard-jones"
epsilon = "119.8 K"
sigma = "3.405 angstrom"
mass = "39.948 u"
[state]
density = ["1.36 g/cm3", "1300 kg/m3"]
temperatures = ["108 K", "120 K"]
[sampling]
time_step = "10.8 fs"
friction = "0.9 1/ps"
[compare]
against = "thol-2016"
tolerance = { heat_capacity = "2 %", pressure = "0.5 MPa" }
"""

Writer = Callable[[str], Path]


@pytest.fixture
def write(tmp_path: Path) -> Writer:
    def write(text: str) -> Path:
        path = tmp_path / "liquid.toml"
        path.write_text(text, encoding="utf-8")
        return path

    return write


def test_the_shortest_study_gets_every_default(write: Writer) -> None:
    study = load(write(SHORTEST))
    assert study.title == "liquid"
    assert study.units == "reduced"
    assert study.scale is study.epsilon is study.sigma is study.mass is None
    assert (study.fluid.potential, study.fluid.truncation, study.fluid.cutoff) == ("lennard-jones", "corrected", 3.0)
    assert study.ideal_heat_capacity == 1.5
    assert [(state.temperature, state.density, state.particles) for state in study.states] == [(1.0, 0.8, 500)]
    sampling = study.sampling
    assert (sampling.seed, sampling.repeats, sampling.scheme, sampling.bath) == (1, 1, "baoab", True)
    assert (sampling.time_step, sampling.friction, sampling.precision) == (0.005, 2.0, "mixed")
    assert (sampling.equilibration, sampling.steps) == (20_000, 200_000)
    assert (sampling.record_every, sampling.frame_every) == (10, 500)
    assert study.compare.against == ()
    assert study.compare.tolerance == {}


def test_a_study_in_SI_is_reduced(write: Writer) -> None:
    study = load(write(COOLANT))
    assert study.units == "SI"
    assert study.scale == Scale(study.epsilon, study.sigma, study.mass)
    assert study.epsilon == pytest.approx(119.8 * Boltzmann, rel=1e-11)
    # sigma^3/m = 1/1680.323 m3/kg, sigma (m/epsilon)^(1/2) = 2156.35 fs, epsilon/sigma^3 = 41.8976 MPa, by hand
    assert list(study.isochores) == pytest.approx([1300 / 1680.323, 1360 / 1680.323], rel=1e-6)
    for states in study.isochores.values():
        assert [state.temperature for state in states] == pytest.approx([108 / 119.8, 120 / 119.8], rel=1e-11)
    assert study.sampling.time_step == pytest.approx(10.8 / 2156.35, rel=1e-5)
    assert study.sampling.friction == pytest.approx(0.9 * 2.15635, rel=1e-5)
    assert study.compare.against == ("thol-2016",)
    assert study.compare.tolerance["heat_capacity"] == Tolerance(0.02, relative=True)
    assert study.compare.tolerance["pressure"].relative is False
    assert study.compare.tolerance["pressure"].value == pytest.approx(0.5 / 41.8976, rel=1e-5)


def test_a_density_below_half_is_a_gas(write: Writer) -> None:
    study = load(write(SHORTEST.replace("0.8", "[0.8, 0.4]") + "particles = 1000"))
    assert (study.fluid.cutoff, study.sampling.friction) == (5.0, 1.0)


def test_until_is_a_share_of_the_value_or_an_error(write: Writer) -> None:
    study = load(write(COOLANT + '[until]\npressure = "0.5 MPa"\nheat_capacity = "1 %"\nenthalpy = 0.01\n'))
    assert study.until is not None
    assert study.until.steps_at_most == 20 * 200_000
    assert study.until.limits == {
        "heat_capacity": Tolerance(0.01, relative=True),
        "pressure": study.compare.tolerance["pressure"],
        "enthalpy": Tolerance(0.01, relative=False),
    }
    assert load(write(study.to_toml())) == study
    assert load(write(COOLANT)).until is None


def test_units_are_those_of_the_states(write: Writer) -> None:
    reduced = COOLANT.replace('["1.36 g/cm3", "1300 kg/m3"]', "0.8").replace('["108 K", "120 K"]', "0.9")
    assert load(write(reduced)).units == "reduced"
    assert load(write(reduced.replace("= 0.9", "= " + '{ from = "108 K", to = 1.0, rungs = 3 }'))).units == "SI"


def test_a_ladder_from_to_is_even_in_inverse_temperature(write: Writer) -> None:
    study = load(write(SHORTEST.replace("[1.0]", "{ from = 2.0, to = 1.0, rungs = 5 }")))
    inverse = [1 / state.temperature for state in study.states]
    assert inverse == pytest.approx([1.0, 0.875, 0.75, 0.625, 0.5], rel=1e-11)


def test_points_that_share_a_density_form_an_isochore(write: Writer) -> None:
    points = "[[1.2, 0.8], [1.5, 0.6], [1.0, 0.8]]"
    study = load(write(f'[fluid]\npotential = "lennard-jones"\n[state]\npoints = {points}'))
    ladders = {rho: [state.temperature for state in states] for rho, states in study.isochores.items()}
    assert ladders == {0.6: [1.5], 0.8: [1.0, 1.2]}
    assert sorted(study.states) == sorted(state for states in study.isochores.values() for state in states)


def test_the_order_of_the_file_does_not_matter(write: Writer) -> None:
    one = load(write(SHORTEST.replace("0.8", "[0.8, 0.7]").replace("[1.0]", "[1.0, 1.2]")))
    assert load(write(SHORTEST.replace("0.8", "[0.7, 0.8]").replace("[1.0]", "[1.2, 1.0]"))) == one


def test_an_unknown_ideal_part_and_a_scheme_without_bath(write: Writer) -> None:
    study = load(write(SHORTEST.replace("[state]", 'ideal_heat_capacity = "unknown"\n[state]')))
    assert study.ideal_heat_capacity is None
    study = load(write(SHORTEST + '[sampling]\nscheme = "velocity-verlet"'))
    assert study.sampling.bath is False


def test_frames_fall_on_records_by_default(write: Writer) -> None:
    sampling = load(write(SHORTEST + "[sampling]\nrecord_every = 30")).sampling
    assert (sampling.frame_every, sampling.steps) == (510, 200_010)


def test_what_is_written_is_what_was_meant(write: Writer) -> None:
    text = load(write(COOLANT)).to_toml()
    for line in (
        'epsilon = "119.8 K"',
        'mass = "39.948 u"',
        'density = ["1.3 g/cm3", "1.36 g/cm3"]',
        'temperatures = ["108 K", "120 K"]',
        'tolerance = { heat_capacity = "2 %", pressure = "0.5 MPa" }',
        "cutoff = 3.0",
        "equilibration = 20000",
    ):
        assert line in text.splitlines()


ABSOLUTE = {
    "residual_energy": '"0.1 kJ/mol"',
    "residual_heat_capacity": '"0.25 J/(mol K)"',
    "heat_capacity": "0.02",
    "pressure": '"1 MPa"',
    "compressibility_factor": "0.03",
    "thermal_pressure": '"0.0123 MPa/K"',
    "bulk_modulus": '"700 bar"',
    "isobaric_heat_capacity": '"0.4 J/(mol K)"',
    "thermal_expansion": '"0.0001 1/K"',
    "sound_speed": '"7 m/s"',
    "joule_thomson": '"0.02 K/MPa"',
    "grueneisen": "0.05",
    "enthalpy": '"0.1 kJ/mol"',
    "residual_chemical_potential": '"0.1 kJ/mol"',
    "residual_helmholtz_energy": '"0.1 kJ/mol"',
    "residual_entropy": '"0.25 J/(mol K)"',
}
VARIANTS = [
    *(
        COOLANT.replace('heat_capacity = "2 %", pressure = "0.5 MPa"', f"{name} = {value}")
        for name, value in ABSOLUTE.items()
    ),
    SHORTEST,
    COOLANT,
    COOLANT.replace("39.948 u", "39.948 g/mol").replace("119.8 K", "0.996 kJ/mol"),
    COOLANT.replace('["108 K", "120 K"]', '{ from = "108 K", to = "150 K", rungs = 7 }'),
    COOLANT.replace('["108 K", "120 K"]', '{ from = "108 K", to = "150 K", overlap = 0.2 }'),
    SHORTEST.replace("[1.0]", "{ from = 1.0, to = 1.2, overlap = 0.2, chosen = [0.98, 1.1, 1.23] }"),
    COOLANT.replace(
        '["108 K", "120 K"]',
        '{ from = "108 K", to = 1.2, overlap = 0.2, chosen = [["106 K", "130 K", "150 K"], ["105 K", "145 K"]] }',
    ),
    COOLANT.replace('["1.36 g/cm3", "1300 kg/m3"]', '"33.3 mol/L"'),
    COOLANT.replace('["1.36 g/cm3", "1300 kg/m3"]', "2.0").replace("3.405", "3.4").replace("39.948 u", "40 u"),
    SHORTEST.replace("[state]", 'truncation = "shifted"\ncutoff = 2.5\n[state]') + '[compare]\nagainst = "thol-2015"',
    SHORTEST + '[sampling]\nscheme = "velocity-verlet"\nseed = 7\nrepeats = 3',
    SHORTEST.replace("density = 0.8\ntemperatures = [1.0]", "points = [[1.2, 0.8], [1.5, 0.6], [1.0, 0.8]]"),
    SHORTEST.replace("[state]", 'ideal_heat_capacity = "unknown"\n[state]'),
    'title = "a \\"quoted\\" \\\\ title, é"' + SHORTEST,
]


@pytest.mark.parametrize("text", VARIANTS)
def test_a_written_study_loads_to_an_equal_one(write: Writer, text: str) -> None:
    study = load(write(text))
    assert load(write(study.to_toml())) == study
    assert load(write(study.to_toml())).to_toml() == study.to_toml()
    assert pickle.loads(pickle.dumps(study)) == study


@pytest.mark.parametrize("name", COMPARED)
def test_a_tolerance_keeps_its_unit(write: Writer, name: str) -> None:
    given = COOLANT.replace('heat_capacity = "2 %", pressure = "0.5 MPa"', f"{name} = {ABSOLUTE[name]}")
    written = load(write(given)).to_toml()
    (line,) = (line for line in written.splitlines() if line.startswith("tolerance"))
    expected = ABSOLUTE[name].replace("700 bar", "70 MPa")
    if name == "heat_capacity":  # given reduced: 0.02 k_B times the gas constant, 8.31446261815 J/(mol K)
        assert float(line.split('"')[1].removesuffix(" J/(mol K)")) == pytest.approx(0.166289252363, rel=1e-11)
    else:
        assert line == f"tolerance = {{ {name} = {expected} }}"
    reduced = given.replace('["1.36 g/cm3", "1300 kg/m3"]', "0.8").replace('["108 K", "120 K"]', "0.9")
    assert '"' not in load(write(reduced)).to_toml().split("tolerance")[1]


def test_a_changed_study_is_written_as_changed(write: Writer) -> None:
    study = load(write(COOLANT))
    longer = replace(study, sampling=replace(study.sampling, steps=400_000), states=study.states[:3])
    again = load(write(longer.to_toml()))
    assert again == longer != study


SI = 'epsilon = "119.8 K"\nsigma = "3.405 angstrom"\nmass = "39.948 u"\n'
REFUSED = [
    # misspelt and unknown keys
    ("density", "densty", r"state\.densty = 0\.8: unknown key; did you mean density\?"),
    ("[state]", "[stat]", r"stat = .*unknown key; did you mean state\?"),
    ("[fluid]", "[fluid]\ncolour = 3", r"fluid\.colour = 3: unknown key; the keys here are potential, epsilon"),
    ("[fluid]", '"a b" = 1\n[fluid]', r'"a b" = 1: unknown key'),
    ("[state]", "[sampling]\nsed = 2\n[state]", r"sampling\.sed = 2: unknown key; did you mean seed\?"),
    # keys of later versions
    (
        "[state]",
        "[until]\nresidual_entropy_change = 0.1\n[state]",
        r"until\.residual_entropy_change = 0\.1: not available",
    ),
    # an error that does not fall as sampling goes on
    (
        "[state]",
        "[until]\nresidual_chemical_potential = 0.1\n[state]",
        r"until\.residual_chemical_potential = 0\.1: not available",
    ),
    # a ladder that a pilot is to choose
    (
        "[1.0]",
        "{ from = 1, to = 2, overlap = 0.6 }",
        r"temperatures\.overlap = 0\.6: what is needed is a number from 0\.05",
    ),
    (
        "[1.0]",
        "{ from = 1, to = 2, overlap = 0.04 }",
        r"temperatures\.overlap = 0\.04: what is needed is a number from",
    ),
    ("[1.0]", "{ from = 2, to = 2, overlap = 0.2 }", r"temperatures\.to = 2: what is needed is a higher temperature"),
    ("[1.0]", "{ from = 1, to = 2, overlap = 0.2, rungs = 3 }", r"temperatures\.rungs = 3: overlap is given too"),
    (
        "[1.0]",
        "{ from = 1, to = 2, rungs = 3, chosen = [1] }",
        r"temperatures\.chosen = \[1\]: these go with an overlap",
    ),
    (
        "[1.0]",
        "{ from = 1, to = 2, overlap = 0.2, chosen = 1 }",
        r"chosen = 1: what is needed is a list of temperatures",
    ),
    (
        "0.8\ntemperatures = [1.0]",
        "[0.8, 0.7]\ntemperatures = { from = 1, to = 2, overlap = 0.2, chosen = [1, 2] }",
        r"chosen = \[1, 2\]: what is needed is 2 lists, one for each density",
    ),
    (
        "[state]",
        "[compare.tolerance]\nresidual_entropy_change = 0.1\n[state]",
        r"tolerance\.residual_entropy_change = 0\.1: not available",
    ),
    # missing values
    ("density = 0.8", "", r"state\.density: missing; what is needed is a number from 1e-06 to 2 \(sigma\^-3\)"),
    ("temperatures = [1.0]", "", r"state\.temperatures: missing; what is needed is a number"),
    ('potential = "lennard-jones"', "", r"fluid\.potential: missing; what is accepted is \"lennard-jones\""),
    ("[state]", 'epsilon = "120 K"\n[state]', r"fluid\.sigma: missing; epsilon, sigma and mass are given all three"),
    # values of the wrong kind
    ("lennard-jones", "lenard-jones", r'fluid\.potential = "lenard-jones": did you mean "lennard-jones"\?'),
    ("density = 0.8", "density = true", r"state\.density = true: what is needed is a number"),
    ("[1.0]", '["warm"]', r'state\.temperatures = \["warm"\]: a value with a unit needs fluid\.epsilon'),
    ("[1.0]", "[1.0, false]", r"state\.temperatures = \[1\.0, false\]: entry 2, false: what is needed is a number"),
    ("[1.0]", "1979-05-27", r"state\.temperatures = 1979-05-27: what is needed is a number"),
    ("[state]", "[state]\nparticles = 500.0", r"state\.particles = 500\.0: what is needed is a whole number from 2"),
    ("[state]", "[state]\nparticles = true", r"state\.particles = true: what is needed is a whole number"),
    ("[state]", "[state]\nparticles = 1", r"state\.particles = 1: what is needed is a whole number from 2"),
    ("[state]", "[sampling]\nseed = -1\n[state]", r"sampling\.seed = -1: what is needed is a whole number from 0"),
    ("[state]", '[sampling]\nscheme = "boab"\n[state]', r'sampling\.scheme = "boab": did you mean "baoab"\?'),
    ("[state]", '[sampling]\nprecision = "single"\n[state]', r'\.precision = "single": what is accepted is "mixed" or'),
    ("[state]", 'cutoff = "long"\n[state]', r'fluid\.cutoff = "long": a value with a unit needs fluid\.epsilon'),
    ("[state]", SI + 'cutoff = "long"\n[state]', r'cutoff = "long": what is needed is a number with a unit of'),
    ("[state]", SI + 'cutoff = "3 K"\n[state]', r"fluid\.cutoff = \"3 K\": 'K' is not a unit of length"),
    ("[fluid]", "title = 3\n[fluid]", r"title = 3: what is needed is one line of text"),
    ("[fluid]", 'title = "two\\nlines"\n[fluid]', r'title = "two\\nlines": what is needed is one line'),
    ("[fluid]", "sampling = 3\n[fluid]", r"sampling = 3: what is needed is a table"),
    ("[state]", "ideal_heat_capacity = 1.0\n[state]", r"capacity = 1\.0: what is needed is a number from 1\.5"),
    # units
    ("density = 0.8", 'density = "1.36 g/cm3"', r"needs fluid\.epsilon, fluid\.sigma and fluid\.mass"),
    ("[state]\ndensity = 0.8", SI + '[state]\ndensity = "1.36 g/cm2"', r"'g/cm2' is not a unit of density"),
    ("[state]\ndensity = 0.8", SI + '[state]\ndensity = "1.36 g/cmm3"', r"'g/cmm3' is not a unit known here"),
    ("[state]\ndensity = 0.8", SI + '[state]\ndensity = "1360 g/cm3"', r"this is 809\.\d+ sigma\^-3; what is needed"),
    ("[state]", SI.replace('"119.8 K"', "119.8") + "[state]", r"fluid\.epsilon = 119\.8: what is needed is a text"),
    ("[state]", SI.replace("119.8 K", "119.8 u") + "[state]", r"'u' is not a unit of epsilon"),
    ("[state]", SI.replace("3.405 angstrom", "3.405 m") + "[state]", r'sigma = "3\.405 m": what is needed is a value'),
    # out of range
    ("density = 0.8", "density = -0.8", r"state\.density = -0\.8: what is needed is a number from 1e-06 to 2"),
    ("density = 0.8", "density = nan", r"state\.density = nan: what is needed is a number"),
    ("[1.0]", "[1.0, 0.0]", r"entry 2, 0\.0: what is needed is a number from 0\.01 to 100"),
    ("[1.0]", "[inf]", r"state\.temperatures = \[inf\]: what is needed is a number"),
    ("[1.0]", "[120.0]", r"from 0\.01 to 100 \(epsilon/k_B\), or a text with a unit such as \"120 K\""),
    ("[state]", "[sampling]\ntime_step = 10.8\n[state]", r"time_step = 10\.8: .* such as \"10\.8 fs\""),
    ("[state]", "cutoff = nan\n[state]", r"fluid\.cutoff = nan: what is needed is a number from 1 to 100"),
    ("[state]", "[compare.tolerance]\npressure = -1\n[state]", r"tolerance\.pressure = -1: what is needed"),
    ("[state]", '[compare.tolerance]\npressure = "200 %"\n[state]', r"what is needed is a share up to 100 %"),
    # lists and ladders
    ("[1.0]", "[]", r"state\.temperatures = \[\]: the list is empty; what is needed is at least one entry"),
    ("density = 0.8", "density = []", r"state\.density = \[\]: the list is empty"),
    ("[1.0]", "[1.0, 1.2, 1]", r"entry 3, 1, stands there twice"),
    ("density = 0.8", "density = [0.8, 0.8]", r"state\.density = .*entry 2, 0\.8, stands there twice"),
    ("[1.0]", "{ from = 1.0, to = 1.0, rungs = 4 }", r"temperatures\.to = 1\.0: too close to from"),
    ("[1.0]", "{ from = 1.0, to = 1.00000000001, rungs = 99 }", r"temperatures\.to = .*: too close to from"),
    ("[1.0]", "{ from = 1.0, to = 1.2, rungs = 1 }", r"rungs = 1: what is needed is a whole number from 2"),
    ("[1.0]", "{ from = 1.0, to = 1.2 }", r"temperatures\.rungs: missing; what is needed is a whole number"),
    ("[1.0]", "{ from = 1.0, upto = 1.2 }", r"temperatures\.upto = 1\.2: unknown key; did you mean to\?"),
    ("density = 0.8", "points = [[1.0, 0.8]]", r"state\.temperatures = .*: points are given too"),
    ("density = 0.8\ntemperatures = [1.0]", "points = [1.0, 0.8]", r"entry 1, 1\.0: what is needed is a pair"),
    ("density = 0.8\ntemperatures = [1.0]", "points = [[1, 0.8], [1.0, 0.8]]", r"entry 2, \[1\.0, 0\.8\], stands"),
    # combinations
    ("[state]", "cutoff = 4.5\n[state]", r"cutoff 4\.5 sigma .* box of 500 .* at most 4\.274 .* at least 584"),
    ("0.8", "0.8\nparticles = 64", r"fluid\.cutoff: the default cutoff 3 sigma .* at most 2\.154 .* at least 173"),
    ("0.8", "0.8\nparticles = 4", r"what is accepted is state\.particles of at least 173"),
    ("[state]", "[sampling]\nframe_every = 25\n[state]", r"frame_every = 25: what is needed is a multiple of"),
    ("[state]", "[sampling]\nsteps = 101\n[state]", r"steps = 101: .* multiple of record_every, which is 10"),
    # until
    ("[state]", "[until]\n[state]", r"until = \{  \}: what is needed is a property and its largest error, such as"),
    ("[fluid]", "until = 3\n[fluid]", r"until = 3: what is needed is a table"),
    ("[state]", "[until]\npresure = 0.1\n[state]", r"until\.presure = 0\.1: unknown key; did you mean pressure\?"),
    ("[state]", "[until]\npressure = 0\n[state]", r"until\.pressure = 0: what is needed is a number from 1e-12"),
    ("[state]", "[until]\npressure = nan\n[state]", r"until\.pressure = nan: what is needed is a number"),
    ("[state]", '[until]\npressure = "0 %"\n[state]', r"until\.pressure = \"0 %\": what is needed is a share"),
    ("[state]", '[until]\npressure = "1 MPa"\n[state]', r"until\.pressure = \"1 MPa\": a value with a unit needs"),
    ("[state]", SI + '[until]\npressure = "1 K"\n[state]', r"until\.pressure = \"1 K\": 'K' is not a unit of pressure"),
    (
        "[state]",
        'ideal_heat_capacity = "unknown"\n[until]\nsound_speed = "1 %"\n[state]',
        r'until\.sound_speed = "1 %": it needs fluid\.ideal_heat_capacity, which is "unknown"',
    ),
    (
        "[state]",
        "[until]\npressure = 0.1\nsteps_at_most = 199990\n[state]",
        r"until\.steps_at_most = 199990: what is needed is a whole number from 200000 to",
    ),
    (
        "[state]",
        "[until]\npressure = 0.1\nsteps_at_most = 300001\n[state]",
        r"steps_at_most = 300001: what is needed is a multiple of record_every, which is 10",
    ),
    # references
    ("[state]", '[compare]\nagainst = "thol-2061"\n[state]', r'against = "thol-2061": did you mean "thol-2016"\?'),
    ("[state]", '[compare]\nagainst = "thol-2015"\n[state]', r"another fluid than .* this one is thol-2016"),
    ("[state]", 'truncation = "plain"\n[compare]\nagainst = "thol-2016"\n[state]', r"for this one is an empty list"),
    # no TOML
    ("[state]", "[state", r"liquid\.toml: this is not TOML: .*line 4"),
    ("density = 0.8", "density = ", r"this is not TOML: .*line 5"),
    ("density = 0.8", "density = 0.8\ndensity = 0.7", r"this is not TOML: .*"),
    ("density = 0.8", f"density = {'[' * 3000}", r"this is not TOML: .*"),
    ("density = 0.8", f"density = {'9' * 5000}", r"this is not TOML: .*"),
]


@pytest.mark.parametrize(("old", "new", "message"), REFUSED)
def test_bad_input_is_refused_in_one_paragraph(write: Writer, old: str, new: str, message: str) -> None:
    path = write(SHORTEST.replace(old, new, 1))
    with pytest.raises(UserError, match=message) as caught:
        load(path)
    text = str(caught.value)
    assert text.startswith(f"{path}: ")
    assert "\n" not in text
    assert str(pickle.loads(pickle.dumps(caught.value))) == text


def test_files_that_cannot_be_read(tmp_path: Path) -> None:
    with pytest.raises(UserError, match=r"absent\.toml: no such file; what is needed is a study file"):
        load(tmp_path / "absent.toml")
    with pytest.raises(UserError, match="this is a directory; what is needed is a study file"):
        load(tmp_path)
    (tmp_path / "file").touch()
    with pytest.raises(UserError, match=r"cannot be read \(Not a directory\)"):
        load(tmp_path / "file" / "study.toml")
    (tmp_path / "latin.toml").write_bytes(b'title = "caf\xe9"')
    with pytest.raises(UserError, match="this is not text in UTF-8"):
        load(tmp_path / "latin.toml")


KEYS = {
    "": ("title", "fluid", "state", "sampling", "compare", "until", "titel"),
    "fluid": ("potential", "epsilon", "sigma", "mass", "cutoff", "truncation", "ideal_heat_capacity"),
    "state": ("density", "temperatures", "points", "particles"),
    "sampling": (
        *("seed", "repeats", "time_step", "friction", "scheme", "precision"),
        *("equilibration", "steps", "record_every", "frame_every"),
    ),
    "compare": ("against", "tolerance"),
    "until": (*COMPARED, "steps_at_most", "residual_entropy_change"),
    "state.temperatures": ("from", "to", "rungs", "overlap", "chosen"),
    "compare.tolerance": (*COMPARED, "residual_entropy_change"),
}
NUMBERS = st.integers() | st.floats() | st.sampled_from([0, 1, 2, 3, 0.8, 1.0, 1e-300, 1e308, 10**400, -0.0])
UNITS = st.sampled_from(
    [
        "K",
        "g/cm3",
        "mol/L",
        "fs",
        "1/ps",
        "angstrom",
        "u",
        "%",
        "dB",
        "degC",
        "degC/m",
        "1/0",
        "Qm^9 Qm^9",
        "m^-9",
        "()",
    ]
)
WORDS = st.sampled_from(["lennard-jones", "baoab", "velocity-verlet", "unknown", "shifted", "thol-2016", "thol-2015"])
TEXTS = st.text(st.characters(exclude_categories=["Cs"]), max_size=12)
QUANTITIES = st.builds(lambda number, unit: f"{number} {unit}", st.floats() | st.integers(), UNITS)
SCALARS = st.booleans() | NUMBERS | TEXTS | WORDS | QUANTITIES | st.dates()
VALUES = st.recursive(SCALARS, lambda inner: st.lists(inner, max_size=3) | st.dictionaries(TEXTS, inner, max_size=2))


def toml(value: object) -> str:
    """A value as TOML."""
    if isinstance(value, str):
        return (
            json.dumps(value).replace("\x7f", "\\u007f") if value.isascii() else json.dumps(value, ensure_ascii=False)
        )
    if isinstance(value, dict):
        return f"{{ {', '.join(f'{toml(key)} = {toml(entry)}' for key, entry in value.items())} }}"
    if isinstance(value, list):
        return f"[{', '.join(map(toml, value))}]"
    return str(value).lower() if isinstance(value, bool) else str(value)


def document(changes: dict[tuple[str, str], object], base: dict[str, dict[str, object]]) -> str:
    tables = {name: dict(content) for name, content in base.items()}
    for (table, key), value in changes.items():
        if "." in table:
            outer, inner = table.split(".")
            nested = tables.setdefault(outer, {}).setdefault(inner, {})
            tables[outer][inner] = {**nested, key: value} if isinstance(nested, dict) else {key: value}
        else:
            tables.setdefault(table, {})[key] = value
    lines = [f"{toml(key)} = {toml(value)}" for key, value in tables.pop("", {}).items()]
    for table, content in tables.items():
        lines += [f"[{table}]", *(f"{toml(key)} = {toml(value)}" for key, value in content.items())]
    return "\n".join(lines)


BASES: list[dict[str, dict[str, object]]] = [
    {
        "fluid": {"potential": "lennard-jones"},
        "state": {"density": 0.8, "temperatures": {"from": 1, "to": 2, "rungs": 3}},
    },
    {
        "fluid": {"potential": "lennard-jones", "epsilon": "120 K", "sigma": "3.4 angstrom", "mass": "40 u"},
        "state": {"density": "1.3 g/cm3", "temperatures": ["120 K"]},
        "compare": {"against": "thol-2016", "tolerance": {"pressure": "2 MPa"}},
        "until": {"heat_capacity": "1 %", "pressure": "1 MPa"},
    },
]
PLACES = st.sampled_from([(table, key) for table, keys in KEYS.items() for key in keys])


@settings(max_examples=400, deadline=None, derandomize=True)
@given(changes=st.dictionaries(PLACES, VALUES, min_size=1, max_size=3), base=st.sampled_from(BASES))
def test_garbage_gives_a_user_error_or_a_study(
    tmp_path_factory: pytest.TempPathFactory, changes: dict[tuple[str, str], object], base: dict[str, dict[str, object]]
) -> None:
    path = tmp_path_factory.getbasetemp() / "garbage.toml"
    path.write_text(document(changes, base), encoding="utf-8", newline="")
    try:
        study = load(path)
    except UserError as problem:
        refusal = str(problem)
    else:
        path.write_text(study.to_toml(), encoding="utf-8")
        assert load(path) == study
        return
    assert "\n" not in refusal
    assert len(refusal) < 1000


@settings(max_examples=150, deadline=None, derandomize=True)
@given(
    temperatures=st.lists(st.floats(50.0, 5000.0), min_size=1, max_size=4, unique_by=lambda value: f"{value:.9e}"),
    density=st.floats(0.85, 3.0),
    cutoff=st.floats(1.0, 3.0),
    epsilon=st.floats(60.0, 300.0),
    time_step=st.floats(0.001, 0.01),
)
def test_any_good_study_survives_writing(
    tmp_path_factory: pytest.TempPathFactory,
    temperatures: list[float],
    density: float,
    cutoff: float,
    epsilon: float,
    time_step: float,
) -> None:
    path = tmp_path_factory.getbasetemp() / "good.toml"
    text = COOLANT.replace('["108 K", "120 K"]', toml([f"{temperature} K" for temperature in temperatures]))
    text = text.replace('["1.36 g/cm3", "1300 kg/m3"]', f'"{density} g/cm3"').replace("119.8 K", f"{epsilon} K")
    text = text.replace("[state]", f"cutoff = {cutoff}\n[state]").replace('"10.8 fs"', f"{time_step}")
    path.write_text(text, encoding="utf-8")
    study = load(path)
    assert isinstance(study, Study)
    path.write_text(study.to_toml(), encoding="utf-8")
    assert load(path) == study
