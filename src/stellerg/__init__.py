"""stellerg: posterior distributions of the energy that binds a star and of its Kelvin-Helmholtz time.

>>> from stellerg import Stars, propagate
>>> posterior = propagate(Stars.of("K-7", mass="1.02 ± 0.03", radius="1.05(2)", luminosity="1.10 +0.12 -0.10"))
>>> bool(posterior.median("binding_energy")[0] > 1e48)  # erg
True

Names are imported when first used, so that ``import stellerg`` costs nothing.
"""

from importlib import import_module

_HOME = {
    "Conventions": "stellerg.energetics",
    "ENGINES": "stellerg.engines",
    "Exact": "stellerg.inputs",
    "InputError": "stellerg.errors",
    "OBSERVABLES": "stellerg.observables",
    "OUTPUTS": "stellerg.energetics",
    "Posterior": "stellerg.posterior",
    "PriorError": "stellerg.errors",
    "SolarReferences": "stellerg.observables",
    "Stars": "stellerg.stars",
    "StellergError": "stellerg.errors",
    "available_priors": "stellerg.structure.files",
    "convert_kelvin_helmholtz_time": "stellerg.energetics",
    "load_prior": "stellerg.structure.files",
    "propagate": "stellerg.propagation",
    "read_stars": "stellerg.catalogue.read",
}

__all__ = [
    "ENGINES",
    "OBSERVABLES",
    "OUTPUTS",
    "Conventions",
    "Exact",
    "InputError",
    "Posterior",
    "PriorError",
    "SolarReferences",
    "Stars",
    "StellergError",
    "available_priors",
    "convert_kelvin_helmholtz_time",
    "load_prior",
    "propagate",
    "read_stars",
]

__version__ = "0.1.0"


def __getattr__(name: str):
    """Import a public name from its home."""
    if name not in _HOME:
        raise AttributeError(f"module 'stellerg' has no attribute {name!r}")
    module = import_module(_HOME[name])
    value = getattr(module, name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted(__all__)
