"""The methods paragraph: what was done, in sentences that can go into a paper, with the works they rest on."""

from __future__ import annotations

from canonry.notation import name_of, unit_text
from canonry.report.setup import Setup, quantity
from canonry.report.works import cited
from canonry.results import Results
from canonry.units import unit_label
from reference import names as references

__all__ = ["citations", "paragraph", "standing_caveats", "support"]

_INSERTED = (
    "The residual chemical potential is by test insertion into stored configurations [insertion]; residual Helmholtz "
    "energy and entropy follow from it with compressibility factor and energy."
)
_FORCED = "The pair distribution was counted, and is from the forces on the particles as well [forces]."
_SCATTERED = (
    "A second bulk modulus is from the limit of the structure factor at long waves: 1/S as polynomials in k², averaged "
    "over their order and range [averaged-fits]."
)
_BETWEEN = (
    "Values between the isochores are derivatives of one residual Helmholtz energy, a Gaussian process with a trend of "
    "second degree [trends], in 1/T and density, that was regressed on all measured derivatives with the covariance of "
    "their errors [process]; the ideal gas and the second virial coefficient are its exact limits."
)
_SUPPORT = (
    "How far reweighting reaches was measured. A state is refused with fewer than 50 effective samples behind it; "
    "beyond the outermost rungs and at another density only rungs count of whose samples at least a fifth survives, "
    "and with less than half the answer bears a caution. Of 500 pairs of short ladders and direct runs (108 particles, "
    "density 0.8 σ⁻³) both agreed within 1.96 combined standard errors, by property, in 93.6 to 95.8 % at T +5 %, 93.8 "
    "to 95.0 % at ε +2 %, 93.2 to 94.8 % at density +0.5 %, and 92.0 to 95.8 % at σ +0.3 %; where 20 to 65 % of the "
    "samples survive, in 86 to 95 %."
)
_SCHEMES = {
    "baoab": "with Langevin dynamics in the BAOAB splitting [baoab]",
    "metropolised": "with Langevin dynamics in the OBABO splitting whose velocity Verlet part has to pass a Metropolis "
    "test [metropolised]",
    "obabo": "with Langevin dynamics in the OBABO splitting, a thermostat half step on either side of velocity Verlet "
    "[obabo]",
    "velocity-verlet": "at constant energy with the velocity Verlet scheme [velocity-verlet]",
}
_MIXED = (
    "Forces between recorded steps were evaluated in single precision; positions, velocities, the thermostat and every "
    "recorded quantity were kept in double precision."
)
_TRUNCATION_CAVEATS = {
    "corrected": "Beyond the cutoff of {cutoff} the fluid is taken as homogeneous (g = 1). That is poor in a dilute or "
    "near-critical fluid, where a larger cutoff is needed.",
    "plain": "The potential ends at {cutoff} without correction; configurations are those of the shifted potential, "
    "the energy is that of the plain one. Values differ from those of the full potential.",
    "shifted": "The potential is shifted to zero at {cutoff}: a fluid of its own, whose values are not those of the "
    "full potential.",
    "force-shifted": "Energy and force are shifted to zero at {cutoff}: a fluid of its own, whose values are not those "
    "of the full potential.",
}


def paragraph(results: Results) -> str:
    """One paragraph; works in brackets are numbered as `citations` lists them."""
    text = " ".join(_sentences(results, Setup.of(results)))
    for number, key in enumerate(cited(text), start=1):
        text = text.replace(f"[{key}]", f"[{number}]")
    return text


def citations(results: Results) -> list[str]:
    """The works that `paragraph` cites, in its order."""
    return list(cited(" ".join(_sentences(results, Setup.of(results)))).values())


def support(results: Results) -> str:
    """Where reweighting is refused, and how often its error bars hold; empty where nothing was reweighted."""
    return _SUPPORT if _reweighted(results) else ""


def standing_caveats(results: Results) -> list[str]:
    """What holds for every study of such a model, whatever its numbers."""
    setup = Setup.of(results)
    return [
        "All values are results of a model. They are not for the design of pressure equipment or for safety decisions "
        "without checked data, local codes and licensed practice.",
        *(_model_caveats(setup) if setup.truncation else ["Ideal parts count molecules, not what they are made of."]),
        f"The system holds {setup.particles} particles in a periodic box. The finite size is not corrected for; it "
        "matters most near a critical point, and inside a two-phase region the sample is not a bulk phase.",
        "The time step shifts the sampled ensemble by a little that grows with its square and that no error bar holds; "
        "`canonry run --step-bias` shows how much.",
        "The particles move classically. Light atoms at low temperature (hydrogen, helium, neon) show quantum effects "
        "that are absent here.",
    ]


def _model_caveats(setup: Setup) -> list[str]:
    return [
        f"The {setup.potential} fluid is a model: particles interact in pairs; no real substance follows it exactly. "
        "Agreement with a reference for the same model says that the sampling is right, not that the model is.",
        _TRUNCATION_CAVEATS[setup.truncation].format(cutoff=setup.cutoff),
    ]


def _sentences(results: Results, setup: Setup) -> list[str]:
    return [
        f"The {setup.fluid}, was sampled with {setup.particles} particles in a periodic cube.",
        *(_origin(results, setup) if setup.adopted else _dynamics(results, setup)),
        *_estimates(results, setup),
        *_comparison(results),
        *([f"Computed with {results.provenance['canonry']}."] if "canonry" in results.provenance else []),
    ]


def _origin(results: Results, setup: Setup) -> list[str]:
    """Of samples that were adopted."""
    repeats = results.equilibration.groupby(["temperature", "density"])["repeat"].nunique()
    most = _counted(int(repeats.max()), "independent repeat")
    return [
        f"Samples of the canonical ensemble at {_counted(len(repeats), 'state')}, at most {most} a state, were taken "
        f"elsewhere and are described in {setup.adopted}.",
        "The end of equilibration was found from the data.",
    ]


def _dynamics(results: Results, setup: Setup) -> list[str]:
    sampling = setup.sampling
    friction = f", friction {quantity(sampling['friction'], '√(ε/m)/σ')}" if setup.bath else ""
    repeats = _counted(max(sampling["repeats"], results.equilibration["repeat"].nunique()), "independent repeat")
    lengths = f"{sampling['equilibration']} steps of equilibration and {_steps(results, setup)} steps"
    states = len(results.properties[["temperature", "density"]].drop_duplicates())
    ensemble = "The canonical ensemble was sampled" if setup.bath else "Trajectories were run"
    return [
        f"{ensemble} at {_counted(states, 'state')} {_SCHEMES[setup.scheme]} "
        f"(time step {quantity(sampling['time_step'], 'σ √(m/ε)')}{friction}; {repeats} a state of {lengths}, "
        f"recorded every {sampling['record_every']} steps).",
        *_rounds(setup),
        *([_MIXED] if setup.scheme in ("baoab", "obabo") and sampling["precision"] == "mixed" else []),
        "The end of equilibration was found from the data.",
    ]


def _steps(results: Results, setup: Setup) -> str:
    """Of a repeat: what the study says, or from the fewest to the most where that depends on the errors."""
    if not setup.until:
        return str(setup.sampling["steps"])
    counts = results.equilibration["samples"] * setup.sampling["record_every"]
    return " to ".join(map(str, sorted({int(counts.min()), int(counts.max())})))


def _rounds(setup: Setup) -> list[str]:
    if not setup.until:
        return []
    limits = [
        f"{name_of(name)} {quantity(limit, unit_text(unit_label(name, 'reduced')))}".strip()
        for name, limit in setup.until.items()
        if name != "steps_at_most"
    ]
    return [
        f"After {setup.sampling['steps']} steps sampling went on in rounds at those states whose standard errors were "
        f"above those asked for ({', '.join(limits)}), up to {setup.until['steps_at_most']} steps."
    ]


def _estimates(results: Results, setup: Setup) -> list[str]:
    fluctuations = (
        "Heat capacity, thermal pressure coefficient and bulk modulus are from fluctuations in the canonical ensemble, "
        "with the energy whose ensemble the forces sample."
        if setup.bath
        else "Temperature is from the mean kinetic energy, heat capacity from kinetic fluctuations at constant energy "
        "[constant-energy], in the form exact for any number of particles [phase-volume]. Thermal pressure coefficient "
        "and isothermal bulk modulus are from exact derivatives of the same phase volume: the fluctuations of the "
        "virial together with those of the inverse kinetic energy give the change of pressure with energy and with "
        "volume at constant energy, and the heat capacity turns these into changes at constant volume and at constant "
        "temperature."
    )
    errors = (
        "Standard errors are from the integrated autocorrelation of the linearised fluctuation of each estimate, with "
        "an automatic summation window and pooled over repeats (Gamma method) [gamma], widened for their own noise "
        "(Student's t) and for the skewness of the estimate [skewness]."
    )
    pooled = (
        "Values between the sampled temperatures are from multistate reweighting over all temperatures of an isochore "
        "[reweighting]; states with fewer than 50 effective samples behind them are refused."
    )
    methods = set(results.properties["method"])
    further = {
        pooled: _reweighted(results),
        _INSERTED: "insertion" in methods,
        _FORCED: results.structure["g_forced"].notna().any(),
        _SCATTERED: "structure" in methods,
        _BETWEEN: len(results.surface) > 0,
    }
    return [fluctuations, errors, *(sentence for sentence, applies in further.items() if applies)]


def _reweighted(results: Results) -> bool:
    return bool((results.curve["trust"] != "no").any() or (results.properties["method"] == "reweighted").any())


def _comparison(results: Results) -> list[str]:
    names = list(dict.fromkeys(map(str, results.verdict["reference"])))
    if not names:
        return []
    cited = " and ".join(f"{name} [{name}]" if name in references() else name for name in names)
    return [
        f"Results were held against {cited} in combined standard errors; the stated accuracy of a reference was read "
        "as 95 %."
    ]


def _counted(number: int, noun: str) -> str:
    return f"{number} {noun}{'' if number == 1 else 's'}"
