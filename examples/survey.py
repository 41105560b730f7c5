"""The invented Quayside survey through the API: what `stellerg catalogue examples/survey.csv` does."""

from pathlib import Path

from astropy import constants
from uncertainties import ufloat

from stellerg import propagate, read_stars

stars = read_stars(Path(__file__).with_name("survey.csv"))
posterior = propagate(stars)

share = 100 * posterior.budget("binding_energy")["structure"]
print(f"Medians, 68.27 % intervals, share of structure in the variance of ln|E| (prior {posterior.prior})")
print(f"{'star':14}{'|E| (1e48 erg)':^30}{'t_KH (Myr)':^30}structure")
for i in posterior.has_results.nonzero()[0]:
    line = f"{stars.identifier[i]:14}"
    for output, unit in (("binding_energy", 1e48), ("kelvin_helmholtz_time", 1)):
        lower, upper = posterior.interval(output)[i] / unit
        median = posterior.median(output)[i] / unit
        line += f"{median:<9.4g} {f'{lower:.3g} to {upper:.3g}':20}" if median > 0 else f"{'not given':30}"
    print(f"{line}{share[i]:7.1f} %")

print("\nIn part or not done")
for name, sentence in zip(stars.identifier, posterior.status_text(), strict=True):
    if sentence:
        print(f"{name}: {sentence}")

# Mean temperature inside one star by the virial theorem: |E| = (3/2) k T M/(mu m_u), mu invented like the rest.
# |E| and the mass keep their correlation: the mass enters the energy squared and the temperature once.
number = list(stars.identifier).index("Lagoon 4")
star = posterior.linear(number)
mass = star["mass"] * constants.M_sun.cgs.value
particle = ufloat(0.61, 0.01) * constants.u.cgs.value
temperature = 2 * star["binding_energy"] * particle / (3 * constants.k_B.cgs.value * mass)
print(f"\nLagoon 4, first order: mean temperature inside ({temperature / 1e6:.2f}) million K")
