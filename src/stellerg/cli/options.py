"""The options that commands share, and the settings they make."""

import functools
import inspect
import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Annotated

import typer

from stellerg.errors import InputError

__all__ = ["OBSERVABLE_OPTIONS", "Settings", "with_options"]

# The observables with a line of help each. They stand here too so that `--help` need not load the physics; a
# test holds them equal to `stellerg.observables.MEASURABLE`.
OBSERVABLE_OPTIONS = {
    "mass": "mass, nominal solar",
    "radius": "radius, nominal solar",
    "luminosity": "bolometric luminosity, nominal solar",
    "log_mass": "log10 of the mass, dex",
    "log_radius": "log10 of the radius, dex",
    "log_luminosity": "log10 of the luminosity, dex",
    "log_effective_temperature": "log10 of the temperature in K, dex",
    "effective_temperature": "effective temperature, K",
    "log_surface_gravity": "log10 of the surface gravity in cm s^-2, dex",
    "mean_density": "mean density, unit required (solar, g/cm3)",
    "large_frequency_separation": "asteroseismic large frequency separation, muHz",
    "frequency_of_maximum_power": "asteroseismic frequency of maximum power, muHz",
    "angular_diameter": "angular diameter, limb-darkened, mas",
    "parallax": "parallax, mas",
    "distance": "distance, pc",
    "bolometric_flux": "bolometric flux, unit required (W/m2, erg/(s cm2))",
    "absolute_bolometric_magnitude": "absolute bolometric magnitude, IAU 2015 zero point, mag",
    "apparent_bolometric_magnitude": "apparent bolometric magnitude, IAU 2015 zero point, mag",
    "mean_molecular_weight": "mean molecular weight, atomic mass constants",
    "hydrogen_mass_fraction": "hydrogen mass fraction X",
    "metal_mass_fraction": "metal mass fraction Z",
    "log_k2": "log10 of the apsidal constant k2, dex",
    "mean_log_k2": "log10 of the mean k2 of a system, weighted by mean_log_k2_weight, dex",
    "moment_of_inertia_factor": "moment of inertia over M R^2",
    "structure_coefficient": "abs(Omega) R/(G M^2)",
}

_MODEL = "Model and outputs"
_STARS = "Stars"
_MEASURED = "Measured quantities, as '1.02 ± 0.03', '1.05(2)', '1.10 +0.12 -0.10' or '1 exact'"

_SHARED: list[tuple[str, object, object]] = [
    (
        "prior",
        str,
        typer.Option("uniform-index", help="Structure model: a name or a .toml file.", rich_help_panel=_MODEL),
    ),
    (
        "engine",
        str,
        typer.Option("auto", help="auto, quadrature, montecarlo, mcmc or linear.", rich_help_panel=_MODEL),
    ),
    ("seed", int, typer.Option(0, help="Seed of engines that draw.", rich_help_panel=_MODEL)),
    (
        "digits",
        int,
        typer.Option(
            0,
            help="montecarlo: draw until the numbers stand to so many digits of their standard deviation (1 or 2).",
            show_default=False,
            rich_help_panel=_MODEL,
        ),
    ),
    (
        "workers",
        int,
        typer.Option(0, help="mcmc: processes.", show_default=False, rich_help_panel=_MODEL),
    ),
    (
        "most_steps",
        int,
        typer.Option(0, help="mcmc: cap on the steps of a chain.", show_default=False, rich_help_panel=_MODEL),
    ),
    (
        "checkpoint",
        str,
        typer.Option(
            "",
            help="mcmc: folder in which chains are kept as they grow; the same call goes on from there.",
            show_default=False,
            rich_help_panel=_MODEL,
        ),
    ),
    (
        "outputs",
        str,
        typer.Option(
            "binding_energy,kelvin_helmholtz_time",
            help="Comma-separated: potential_energy, internal_energy, binding_energy, kelvin_helmholtz_time, "
            "rest_energy_fraction, specific_binding_energy, free_fall_time, nuclear_time.",
            rich_help_panel=_MODEL,
        ),
    ),
    (
        "time_convention",
        str,
        typer.Option(
            "total",
            help="Kelvin-Helmholtz time: total abs(E)/L, potential abs(Omega)/L, GM2/RL or GM2/2RL.",
            rich_help_panel=_MODEL,
        ),
    ),
    (
        "adiabatic_index",
        str,
        typer.Option("5/3", help="Adiabatic index of the gas, above 4/3.", rich_help_panel=_MODEL),
    ),
    (
        "pressure",
        str,
        typer.Option("gas", help="gas, or gas+radiation (always under prior main-sequence).", rich_help_panel=_MODEL),
    ),
    (
        "ionisation",
        bool,
        typer.Option(False, "--ionisation", help="Count the energy that ionised the star.", rich_help_panel=_MODEL),
    ),
    (
        "discrepancy",
        float,
        typer.Option(
            0.25,
            help="Misfit of polytropes to real stars, for structure observables: standard deviation of the index of "
            "the energy less that of k2.",
            rich_help_panel=_MODEL,
        ),
    ),
    (
        "mean_log_k2_weight",
        float,
        typer.Option(
            math.nan,
            help="Weight of the star in --mean-log-k2, in (0, 1].",
            show_default=False,
            rich_help_panel=_STARS,
        ),
    ),
    ("energy_unit", str, typer.Option("erg", help="erg or J.", rich_help_panel=_MODEL)),
    (
        "nuclear_mass_fraction",
        float,
        typer.Option(0.1, help="Share of the mass that burns, for nuclear_time.", rich_help_panel=_MODEL),
    ),
    (
        "nuclear_efficiency",
        float,
        typer.Option(0.007, help="Share of its rest energy set free, for nuclear_time.", rich_help_panel=_MODEL),
    ),
    (
        "use",
        str,
        typer.Option(
            "",
            help="Comma-separated independent measurements; all of them are used. Default: the first that "
            "determine the star, since redundant columns are not evidence.",
            rich_help_panel=_STARS,
        ),
    ),
    (
        "shape",
        str,
        typer.Option(
            "",
            help="Distribution of errors where it fits: normal, lognormal, three-quantile, split-normal.",
            rich_help_panel=_STARS,
        ),
    ),
    (
        "correlation",
        list[str],
        typer.Option([], help="Of two measurements: mass,radius=0.6 (repeatable).", rich_help_panel=_STARS),
    ),
    (
        "evolutionary_state",
        str,
        typer.Option("", help="main-sequence, pre-main-sequence, evolved or unknown.", rich_help_panel=_STARS),
    ),
    (
        "solar_large_frequency_separation",
        float,
        typer.Option(135.1, help="Solar reference, muHz.", rich_help_panel=_STARS),
    ),
    (
        "solar_frequency_of_maximum_power",
        float,
        typer.Option(3090.0, help="Solar reference, muHz.", rich_help_panel=_STARS),
    ),
]


@dataclass(frozen=True)
class Settings:
    """What the shared options say."""

    prior: str
    engine: str
    seed: int
    digits: int
    workers: int
    most_steps: int
    checkpoint: str
    outputs: str
    time_convention: str
    adiabatic_index: str
    pressure: str
    ionisation: bool
    discrepancy: float
    mean_log_k2_weight: float
    energy_unit: str
    nuclear_mass_fraction: float
    nuclear_efficiency: float
    use: str
    shape: str
    correlation: list[str]
    evolutionary_state: str
    solar_large_frequency_separation: float
    solar_frequency_of_maximum_power: float

    def propagation(self) -> dict:
        """Return the keyword arguments of `stellerg.propagate`."""
        from stellerg.energetics import Conventions

        return {
            "outputs": _names(self.outputs),
            "prior": self.prior,
            "engine": self._engine(),
            "seed": self.seed,
            "use": _names(self.use) or None,
            "conventions": Conventions(
                time=self.time_convention,
                adiabatic_index=_fraction("adiabatic-index", self.adiabatic_index),
                energy_unit=self.energy_unit,
                nuclear_mass_fraction=self.nuclear_mass_fraction,
                nuclear_efficiency=self.nuclear_efficiency,
                pressure=self.pressure,
                ionisation=self.ionisation,
            ),
            "discrepancy": self.discrepancy,
        }

    def _engine(self):
        """The engine's name, or the engine itself where options of its own were given."""
        names = ("digits", "workers", "most_steps", "checkpoint")
        given = {name: getattr(self, name) for name in names if getattr(self, name)}
        if not given:
            return self.engine
        from dataclasses import fields

        from stellerg.engines import ENGINES

        if self.engine not in ENGINES:
            option = next(iter(given))
            owner = next(name for name, made in ENGINES.items() if option in {f.name for f in fields(made)})
            raise InputError(f"--{_dashed(option)}: belongs to {owner}; add --engine {owner}")
        known = {f.name for f in fields(ENGINES[self.engine])}
        for name in given:
            if name not in known:
                raise InputError(f"--{_dashed(name)}: the engine {self.engine} has no such option")
        return ENGINES[self.engine](**given, **({"seed": self.seed} if "seed" in known else {}))

    @property
    def k2_weight(self) -> float | None:
        """Weight of the star in the mean k2 of its system, if it was given."""
        weight = self.mean_log_k2_weight
        if not math.isnan(weight) and not 0.0 < weight <= 1.0:
            raise InputError(f"--mean-log-k2-weight: must lie in (0, 1], got {weight:g}")
        return None if math.isnan(weight) else weight

    def solar(self):
        """Return the solar references of the scaling relations."""
        from stellerg.observables import SolarReferences

        for name in ("solar_large_frequency_separation", "solar_frequency_of_maximum_power"):
            if not getattr(self, name) > 0.0:
                raise InputError(f"--{name.replace('_', '-')}: must be positive, got {getattr(self, name)}")
        return SolarReferences(self.solar_large_frequency_separation, self.solar_frequency_of_maximum_power)

    def correlations(self) -> dict[tuple[str, str], float]:
        """Return the correlations by pair of observables."""
        found = {}
        for text in self.correlation:
            pair, equals, value = text.partition("=")
            names = _names(pair)
            if not equals or len(names) != 2:
                raise InputError(f"--correlation: {text!r} is not of the form mass,radius=0.6")
            if names in found or names[::-1] in found:
                raise InputError(f"--correlation: {pair!r} is given twice; give each pair once")
            try:
                found[names[0], names[1]] = float(value)
            except ValueError:
                raise InputError(f"--correlation: {value!r} in {text!r} is not a number") from None
        return found


def _dashed(name: str) -> str:
    return name.replace("_", "-")


def _names(text: str) -> tuple[str, ...]:
    return tuple(name.strip().replace("-", "_") for name in text.split(",") if name.strip())


def _fraction(option: str, text: str) -> float:
    """Return a number written as 1.6667 or 5/3."""
    numerator, slash, denominator = text.partition("/")
    try:
        return float(numerator) / float(denominator) if slash else float(text)
    except (ValueError, ZeroDivisionError):
        raise InputError(f"--{option}: {text!r} is not a number; write 1.6667 or 5/3") from None


def with_options(command: Callable, *, observables: bool) -> Callable:
    """Give a command the shared options (as `settings`) and, if asked, one option per observable (as `given`)."""
    own = [p for p in inspect.signature(command).parameters.values() if p.name not in ("settings", "given")]
    extra: list[tuple[str, object, object]] = []
    if observables:
        extra += [
            (name, str, typer.Option("", help=text, rich_help_panel=_MEASURED, show_default=False))
            for name, text in OBSERVABLE_OPTIONS.items()
        ]
    extra += _SHARED
    parameters = [
        inspect.Parameter(
            name,
            inspect.Parameter.KEYWORD_ONLY,
            annotation=Annotated[kind, _bare(option)],
            default=option.default,
        )
        for name, kind, option in extra
    ]

    @functools.wraps(command)
    def wrapped(*args, **options):
        shared = {name: options.pop(name) for name, _, _ in _SHARED}
        if observables:
            options["given"] = {name: text for name in OBSERVABLE_OPTIONS if (text := options.pop(name))}
        return command(*args, settings=Settings(**shared), **options)

    wrapped.__signature__ = inspect.Signature([*own, *parameters])
    wrapped.__annotations__ = {p.name: p.annotation for p in (*own, *parameters)}
    del wrapped.__wrapped__  # typer would look through it
    return wrapped


def _bare(option):
    """The same option without its default, which the signature carries."""
    import copy

    bare = copy.copy(option)
    bare.default = ...
    return bare
