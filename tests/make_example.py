"""Rebuild examples/binder-lot-0417 from a fixed seed: `python tests/make_example.py`.

The sample, the works and every reading are invented. The truth behind the readings is `POLYMER`
and `BENCH` below; `python tests/make_example.py --truth` prints it with the errors that were
drawn. The seed is the first from 417 on that drew every effect (stock, solids, dn/dc, standard,
K, a) within 1.3 standard uncertainties: an example of an ordinary week, no evidence of anything.
"""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np
from generator import Bench, Capillary, Lab, Solution, draw_lab, schulz_zimm, write_tables

SEED = 420
FOLDER = Path(__file__).resolve().parent.parent / "examples" / "binder-lot-0417"

POLYMER = schulz_zimm(Mw=262e3, dispersity=2.1)  # Mn 124.8, Mz 399.2 kg/mol
BENCH = Bench(
    # A2 of scattering to osmometry 0.875, as good solvents have it at this dispersity;
    # nu = (1 + a)/3; radius of gyration 24.9 nm (z-average)
    solution=Solution(
        A2_osmometry=4.0e-4,
        A2_scattering=3.5e-4,
        g=0.25,
        K_s=0.0158,
        nu=0.57,
        k_viscosity=0.36,
        k3=0.05,
    ),
    capillary=Capillary(calibrated_on="Mw", M_ref=141.4e3),
    u_stock=0.008,
    solids=0.985,
    u_solids=0.004,
)

CASE = """\
# Binder lot 0417: an INVENTED example. No such works, lot or laboratory exists; the readings were
# drawn by tests/make_example.py, which also holds the truth behind them.
#
# README: three instruments, one polymer, one stock solution. `reconcile run case.toml` reads this
# document and the tables beside it.
#
# Every quantity carries its unit; every u is a STANDARD uncertainty (not twice that), absolute or
# in %. Caution: butanone is highly flammable and goniometers hide lasers of a high class; the
# rules of your own laboratory come first.

case = 1

[sample]
name = "Binder lot 0417"
polymer = "poly(vinyl acetate)"
architecture = "linear"                       # linear | branched | unknown
composition = "homopolymer"
repeat_unit = "86.09 g/mol"
specific_volume = "0.84 mL/g"
# The beads hold some water and residual solvent. The c in the tables is what was weighed, per
# volume of solution; dry polymer is this fraction of it (loss on drying).
solids = { value = 0.985, u = 0.004 }

# What several readings share is named once here and listed under `effects` where it applies.
[effects.stock]                               # one stock solution fed all the flasks
target = "concentration"
u = "0.8 %"

[effects.dn_dc]                               # refractive index increment: counts twice in Mw
target = "dn_dc"
u = "1.5 %"

[effects.standard]                            # Rayleigh ratio of the toluene standard
target = "rayleigh_ratio"
u = "2 %"

# Heads of the solution side over the solvent side, zero subtracted; two readings for each flask.
[[osmometry]]
name = "membrane osmometer"
date = "2026-03-04"
solvent = "butanone"
temperature = "25 degC"
readings = "osmometry.csv"                    # c [g/L], head [mm]
liquid_density = "0.7997 g/mL"                # butanone, the liquid that stands in the manometer
u_reading = "0.1 mm"
u_concentration = "0.3 %"                     # of each flask, beside what `stock` covers
effects = ["stock"]

# Excess Rayleigh ratios: solvent subtracted, corrected for the scattering volume.
[[light_scattering]]
name = "goniometer, 633 nm"
date = "2026-03-05"
solvent = "butanone"
temperature = "25 degC"
readings = "scattering.csv"                   # c [g/L], angle [deg], R [1/cm]
wavelength = "633 nm"                         # in vacuum
polarisation = "vertical"
refractive_index = 1.376                      # of butanone, here and at this wavelength
dn_dc = { value = "0.080 mL/g", wavelength = "633 nm", from = "literature" }
u_reading = "1 %"
u_concentration = "0.5 %"
effects = ["stock", "dn_dc", "standard"]

# Flow times: three timings of the solvent (c = 0) and of each solution.
[[viscometry]]
name = "capillary viscometer"
date = "2026-03-06"
solvent = "butanone"
temperature = "25 degC"
readings = "viscometry.csv"                   # c [g/dL], t [s]
u_reading = "0.05 s"
u_concentration = "0.3 %"
effects = ["stock"]

# Fitted against Mw of whole polymers of dispersity 2, so the average of the calibration samples
# has to be allowed for. M_range, M_ref, u_K and u_a are this (invented) laboratory's judgement.
[viscometry.mark_houwink]
K = "1.07e-2 mL/g"
a = 0.71
u_K = "4 %"                                   # of K M^a at M_ref
u_a = 0.010
M_ref = "141.4 kg/mol"
M_range = ["20 kg/mol", "1000 kg/mol"]
calibrated_on = "Mw"
calibration_dispersity = 2.0
source = "Matsumoto and Ohyanagi, viscosity-molecular weight relationship for polyvinyl acetate"

[limits]                                      # specification of the lot
Mw = ["240 kg/mol", "280 kg/mol"]
dispersity = { max = 2.4 }
"""


def make_lab() -> Lab:
    """Draw the example's laboratory."""
    return draw_lab(POLYMER, BENCH, np.random.default_rng(SEED))


def write_example(folder: Path) -> None:
    """Write the case document and its tables."""
    folder.mkdir(parents=True, exist_ok=True)
    write_tables(make_lab(), folder, rounded=True)
    (folder / "case.toml").write_text(CASE, encoding="utf-8")


def describe_truth(lab: Lab) -> str:
    """List the truth and the drawn errors, one to a line."""
    lines = [f"{name} = {value:.6g}" for name, value in vars(lab.truth).items()]
    lines += [f"error of {name}: {np.round(e, 4).tolist()}" for name, e in lab.errors.items()]
    return "\n".join(lines)


if __name__ == "__main__":
    if "--truth" in sys.argv[1:]:
        sys.stdout.write(describe_truth(make_lab()) + "\n")
    else:
        write_example(FOLDER)
