"""What must be stated of samples from elsewhere, and what is said where it is not or is wrong."""

from pathlib import Path
from typing import Any

import numpy as np
import pytest

import canonry
from canonry.errors import UserError
from tests.flow.adoption.conftest import NAMES, Home, description, table, taken_in

WRONG: dict[str, tuple[dict[str, Any], str]] = {
    "unknown key": ({"moleculs": 64}, r"samples: moleculs = 64: unknown key; did you mean molecules\?"),
    "no molecules": ({"molecules": None}, r"molecules: in rungs\[1\], missing; what is needed is a whole number"),
    "no columns": ({"columns": None}, r"columns: in rungs\[1\], missing; .* time, potential, dynamical"),
    "unknown column": ({"columns": {"potental": "U"}}, r"columns\.potental = \"U\": unknown key; did you mean poten"),
    "nothing to say": ({"columns": {"time": "t", "kinetic": "K"}}, "at least one of potential, pressure, virial"),
    "both": ({"columns": NAMES, "x": 0}, "unknown key"),
    "no such column": ({"columns": {"time": "t", "potential": "V"}}, r"there is no column 'V' \(potential\); .* t, U"),
    "no time": ({"columns": {"potential": "U"}}, r"interval: in rungs\[1\], missing; columns has no time; .* number"),
    "no units": ({"units": None}, r"units: in rungs\[1\], missing; .*units of energy, pressure, time"),
    "no unit": ({"units": {"energy": "kJ/mol", "time": "ps"}}, r"units\.energy = \"kJ/mol\": .* needs fluid\.epsilon"),
    "no such unit": ({"units": {"energy": 3}}, r"units\.energy = 3: .* such as \"kJ/mol\", or \"reduced\""),
    "no basis": ({"energy": None}, r"energy: in rungs\[1\], missing; .* need it; what is accepted is \"total\" or"),
    "no tail stated": ({"long_range": None}, r"long_range: in rungs\[1\], missing; .*cutoff.* true or false"),
    "no kinetic part": (
        {"pressure_kinetic": None},
        r"pressure_kinetic: in rungs\[1\], missing; .* \"instantaneous\" or",
    ),
    "no freedom": (
        {"kinetic_freedom": None},
        r"kinetic_freedom: in rungs\[1\], missing; columns\.kinetic needs it; .*3N",
    ),
    "no such freedom": ({"kinetic_freedom": "6N"}, r"kinetic_freedom = \"6N\": .* \"3N\" or \"3N-3\""),
    "no fluid": ({"fluid": {}}, r"fluid\.potential: missing; what is accepted is \"lennard-jones\" or \"elsewhere\""),
    "no cutoff": ({"fluid": {"potential": "lennard-jones"}}, r"fluid\.cutoff: missing; .* the samples were taken"),
    "spheres with parts": ({"intramolecular": True}, r"intramolecular = true: .* single spheres have no such part"),
    "no such tail": (
        {"fluid": {"potential": "lennard-jones", "cutoff": 2.2, "truncation": "shifted"}},
        r"long_range = true: .* truncation \"shifted\" has no such part; what is accepted is false",
    ),
    "no rungs": ({"rungs": None}, r"rungs: missing; .* \[\[rungs\]\] for every temperature and density"),
    "no density": ({"rungs": [{"temperature": 1.2}]}, r"rungs\[1\]\.density: missing; what is needed is a number"),
    "no files": ({"rungs": [{"temperature": 1.2, "density": 0.7}]}, r"rungs\[1\]\.files: missing; .* for each repeat"),
    "pressure set": (
        {"rungs": [{"temperature": 1.2, "pressure": 0.1}]},
        r"rungs\[1\]\.pressure = 0\.1: samples at a set pressure are not taken; .* constant volume \(NVT\)",
    ),
    "both volume and density": (
        {"rungs": [{"temperature": 1.2, "density": 0.7, "volume": 91.4}]},
        r"rungs\[1\]\.volume = 91\.4: density is given too",
    ),
    "molecules that differ": (
        {
            "rungs": [
                {"temperature": 1.2, "density": 0.7},
                {"temperature": 1.2, "density": 0.6, "molecules": 32},
                {"temperature": 1.4, "density": 0.7, "molecules": 63},
            ]
        },
        r"^samples: rungs\[3\]\.molecules = 63: rungs\[1\], of the same density, has 64; what is accepted is one "
        r"number for each density$",
    ),
    "twice": (
        {"rungs": [{"temperature": 1.2, "density": 0.7}, {"temperature": 1.2, "density": 0.7}]},
        "stands there twice",
    ),
}


@pytest.mark.parametrize("fault", WRONG)
def test_what_is_not_stated_or_wrong_is_named_with_what_is_accepted(home: Home, fault: str) -> None:
    changes, message = WRONG[fault]
    spec = {key: value for key, value in (description(home) | changes).items() if value is not None}
    if changes.keys() != {"rungs"}:
        for rung, series in zip(spec["rungs"], home.series.values(), strict=True):
            rung["samples"] = list(map(table, series))
    with pytest.raises(UserError, match=message):
        canonry.adopt(spec, into="got")
    assert not Path("got").exists()


def test_a_varying_volume_is_refused_and_a_wrong_one_told(home: Home) -> None:
    columns = {holds: NAMES[holds] for holds in ("time", "potential")} | {"volume": "V"}
    generator = np.random.default_rng(5)
    with pytest.raises(UserError, match=r"columns\.volume = \"V\": in rungs\[1\], the volume varies: .* \(NVT\)$"):
        taken_in(
            home, lambda s: table(s).assign(V=s.state.volume * generator.normal(1.0, 0.01, len(s))), columns=columns
        )
    with pytest.raises(UserError, match=r"the volume is 1\.1 times that of the state"):
        taken_in(home, lambda s: table(s).assign(V=1.1 * s.state.volume), columns=columns)
    taken_in(home, lambda s: table(s).assign(V=1.0001 * s.state.volume), columns=columns)
