"""Synthetic raw readings of one polymer sample, written from the physics alone.

This module judges the package and therefore shares nothing with it: a distribution is a list of
species (molar mass, mass fraction), every average is a plain sum over that list, every reading
is computed from the species upwards.

Units: molar mass g/mol; concentration g/mL inside, and in the tables g/L (osmometry, light
scattering) or g/dL (viscometry); A2 mol mL/g^2; limiting viscosity number mL/g; Rayleigh ratio
1/cm; radius nm; pressure Pa; head mm; time s; temperature K.

Sign of every error: e = ln(used/true), so true = used * exp(-e). What a user would state stays
fixed from one drawn laboratory to the next; the true value moves. The exponent of Mark-Houwink
is the exception to the logarithm: a_used = a_true + e.

Sources are the books and papers named in the docstrings, cited from memory.
"""

from __future__ import annotations

import csv
import math
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import TYPE_CHECKING, TypeAlias

import numpy as np
from scipy import stats

if TYPE_CHECKING:
    from collections.abc import Callable, Sequence

__all__ = [
    "FAMILIES",
    "Bench",
    "Capillary",
    "Lab",
    "Oracle",
    "Osmometer",
    "Photometer",
    "Polymer",
    "Solution",
    "Table",
    "Truth",
    "calibration_factor",
    "debye_coil",
    "draw_lab",
    "error_sizes",
    "from_density",
    "lab_to_files",
    "log_normal",
    "mixture",
    "no_errors",
    "optical_constant",
    "oracle_sd",
    "scattering_vector",
    "schulz_zimm",
    "signals",
    "true_values",
    "uniform",
    "write_tables",
]

Array: TypeAlias = np.ndarray
Errors: TypeAlias = dict[str, np.ndarray]

GAS_CONSTANT = 8.314462618  # J/(mol K), exact product of SI constants
AVOGADRO = 6.02214076e23  # 1/mol, exact
STANDARD_GRAVITY = 9.80665  # m/s^2, exact by convention
GRID_POINTS = 4001
TAIL = 1e-13  # share of the number and of the (z+2) distribution left outside the grid


# --- the polymer: species and sums over them ----------------------------------------------------


@dataclass(frozen=True, eq=False)
class Polymer:
    """Species of a polymer: molar masses M (g/mol) and mass fractions w, which sum to one."""

    M: Array
    w: Array

    def mean(self, power: float) -> float:
        """Mass-weighted mean of M**power."""
        return float(np.sum(self.w * self.M**power))

    @property
    def Mn(self) -> float:  # noqa: N802
        """Number average, 1/sum(w/M), g/mol."""
        return 1.0 / self.mean(-1.0)

    @property
    def Mw(self) -> float:  # noqa: N802
        """Mass average, sum(w M), g/mol."""
        return self.mean(1.0)

    @property
    def Mz(self) -> float:  # noqa: N802
        """z-average, sum(w M^2)/sum(w M), g/mol."""
        return self.mean(2.0) / self.mean(1.0)

    @property
    def dispersity(self) -> float:
        """Mw/Mn."""
        return self.Mw / self.Mn

    def Mv(self, a: float) -> float:  # noqa: N802
        """Viscosity average (sum w M^a)^(1/a), g/mol (Flory 1953)."""
        return self.mean(a) ** (1.0 / a)

    def radius_z(self, K_s: float, nu: float) -> float:
        """Root of the z-average square radius of gyration, nm, from Rg = K_s M^nu."""
        squares = (K_s * self.M**nu) ** 2
        return math.sqrt(float(np.sum(self.w * self.M * squares)) / self.Mw)

    def scattering_mass(self, q: Array, K_s: float, nu: float) -> Array:
        """Mw P(q) = sum w M P_coil(q^2 Rg^2), g/mol; q in 1/cm, K_s in nm."""
        radius = K_s * 1e-7 * self.M**nu
        u = np.square(np.outer(np.atleast_1d(q), radius))
        return debye_coil(u) @ (self.w * self.M)


def _species(M: Array, mass: Array) -> Polymer:
    keep = mass > 0.0
    return Polymer(M[keep], mass[keep] / mass[keep].sum())


def from_density(density: Callable[[Array], Array], low: float, high: float) -> Polymer:
    """Discretise a mass density per unit of ln M between two molar masses (g/mol)."""
    log_M = np.linspace(math.log(low), math.log(high), GRID_POINTS)
    return _species(np.exp(log_M), np.asarray(density(log_M), dtype=float))


def uniform(M: float) -> Polymer:
    """Chains of one length."""
    return Polymer(np.array([M]), np.array([1.0]))


def _check_dispersity(dispersity: float) -> None:
    if not 1.0 < dispersity <= 10.0:
        raise ValueError(f"dispersity must be above 1 and at most 10, got {dispersity}")


def schulz_zimm(Mw: float, dispersity: float) -> Polymer:
    """Schulz-Zimm: by mass a gamma distribution of shape k + 1, k = 1/(dispersity - 1).

    Schulz 1939, Zimm 1948. The grid runs from the far lower tail of the number distribution
    (shape k) to the far upper tail of the (z+2) distribution (shape k + 4).
    """
    _check_dispersity(dispersity)
    k = 1.0 / (dispersity - 1.0)
    by_mass = stats.gamma(k + 1.0, scale=Mw / (k + 1.0))
    low = stats.gamma(k, scale=Mw / (k + 1.0)).ppf(TAIL)
    high = stats.gamma(k + 4.0, scale=Mw / (k + 1.0)).isf(TAIL)
    return from_density(lambda x: np.exp(by_mass.logpdf(np.exp(x)) + x), low, high)


def log_normal(Mw: float, dispersity: float) -> Polymer:
    """Log-normal: ln M normal by mass with variance ln(dispersity) (Wesslau 1956)."""
    _check_dispersity(dispersity)
    variance = math.log(dispersity)
    sd = math.sqrt(variance)
    centre = math.log(Mw) - variance / 2.0
    reach = -stats.norm.ppf(TAIL) * sd
    low, high = centre - variance - reach, centre + 3.0 * variance + reach
    return from_density(stats.norm(centre, sd).pdf, math.exp(low), math.exp(high))


def mixture(parts: Sequence[tuple[float, Polymer]]) -> Polymer:
    """Blend polymers, given as (mass share, polymer); the species are kept side by side."""
    M = np.concatenate([polymer.M for _, polymer in parts])
    mass = np.concatenate([share * polymer.w for share, polymer in parts])
    order = np.argsort(M, kind="stable")
    return _species(M[order], mass[order])


FAMILIES: dict[str, Callable[[float, float], Polymer]] = {
    "schulz-zimm": schulz_zimm,
    "log-normal": log_normal,
}


# --- physics of one reading ---------------------------------------------------------------------


def debye_coil(u: Array) -> Array:
    """Form factor of a Gaussian coil, 2 (e^-u - 1 + u)/u^2, u = q^2 Rg^2 (Debye 1947)."""
    u = np.asarray(u, dtype=float)
    safe = np.where(u < 1e-2, 1.0, u)
    series = 1.0 - u / 3.0 + u**2 / 12.0 - u**3 / 60.0 + u**4 / 360.0
    return np.where(u < 1e-2, series, 2.0 * (np.expm1(-safe) + safe) / safe**2)


def optical_constant(n: float, dn_dc: float, wavelength: float) -> float:
    """K* = 4 pi^2 n^2 (dn/dc)^2/(N_A lambda^4), mol cm^2/g^2, vertically polarised light.

    n of the solvent, dn_dc in mL/g, vacuum wavelength in nm (Zimm 1948; Kratochvil 1987).
    """
    return 4.0 * math.pi**2 * (n * dn_dc) ** 2 / (AVOGADRO * (wavelength * 1e-7) ** 4)


def scattering_vector(n: float, wavelength: float, angles: Array) -> Array:
    """Length of the scattering vector, (4 pi n/lambda) sin(theta/2), 1/cm; nm and degrees."""
    return 4.0 * math.pi * n / (wavelength * 1e-7) * np.sin(np.radians(angles) / 2.0)


def calibration_factor(a: float, dispersity: float) -> float:
    """Limiting viscosity number of Schulz-Zimm chains over that of uniform ones of mass Mw.

    Constants fitted against Mw of such samples are K_uniform times this; Gamma(2 + a)/2^a at
    dispersity 2.
    """
    polymer = schulz_zimm(1.0, dispersity)
    return polymer.mean(a) / polymer.Mw**a


# --- the bench: what is measured, how, and how well ---------------------------------------------


@dataclass(frozen=True)
class Solution:
    """True behaviour of the polymer in its solvent.

    A2 in mol mL/g^2 as each technique averages it; g = A3/(A2^2 M) of both; Rg = K_s M^nu in nm;
    `form` is "huggins" (with the cubic coefficient k3) or "martin" (eta_sp = x exp(k x)).
    """

    solvent: str = "butanone"
    temperature: float = 298.15
    A2_osmometry: float = 4.0e-4
    A2_scattering: float = 3.5e-4
    g: float = 0.25
    K_s: float = 0.0158
    nu: float = 0.57
    form: str = "huggins"
    k_viscosity: float = 0.36
    k3: float = 0.05


@dataclass(frozen=True)
class Osmometer:
    """Membrane osmometry: flasks in g/L; `quantity` "head" (mm) or "pi" (Pa), as is u_reading."""

    concentrations: tuple[float, ...] = (1.0, 2.0, 3.0, 4.0, 5.0, 6.0)
    replicates: int = 2
    quantity: str = "head"
    liquid_density: float = 0.7997
    u_reading: float = 0.1
    u_flask: float = 0.003


@dataclass(frozen=True)
class Photometer:
    """Static light scattering: flasks in g/L, angles in degrees, wavelength in nm.

    `quantity` is "R" (excess, 1/cm), "R_total" (with c = 0 rows) or "Kc_R" (mol/g, from the
    stated constants). Errors are relative; u_angle is a factor shared by all readings at one
    angle, u_flask an error of one concentration. dn_dc (mL/g) is the stated value; taken from
    "same stock", it carries the opposite of the stock error besides its own.
    """

    concentrations: tuple[float, ...] = (1.0, 2.0, 3.0, 4.0, 5.0)
    angles: tuple[float, ...] = (30.0, 45.0, 60.0, 75.0, 90.0, 105.0, 120.0, 135.0, 150.0)
    quantity: str = "R"
    wavelength: float = 633.0
    refractive_index: float = 1.376
    dn_dc: float = 0.080
    dn_dc_from: str = "literature"
    R_solvent: float = 5.0e-6
    u_reading: float = 0.01
    u_flask: float = 0.005
    u_angle: float = 0.0
    u_dn_dc: float = 0.015
    u_rayleigh: float = 0.02


@dataclass(frozen=True)
class Capillary:
    """Capillary viscometry: flasks in g/dL, times in s; Mark-Houwink constants as stated.

    K in mL/g; u_K is the relative error of K M_ref^a, u_a the absolute one of a, uncorrelated.
    `calibrated_on` is "uniform" or "Mw" (of Schulz-Zimm samples of `calibration_dispersity`).
    """

    concentrations: tuple[float, ...] = (0.28, 0.45, 0.62, 0.79, 0.96)
    replicates: int = 3
    t0: float = 180.0
    K: float = 1.07e-2
    a: float = 0.71
    M_ref: float = 1.5e5
    calibrated_on: str = "uniform"
    calibration_dispersity: float = 2.0
    u_reading: float = 0.05
    u_flask: float = 0.003
    u_K: float = 0.04
    u_a: float = 0.010


@dataclass(frozen=True)
class Bench:
    """A laboratory: instruments (None where there is none) and what they share.

    u_stock is the relative error of the one stock that fed all flasks; solids the stated dry
    polymer in what was weighed. Without `state_errors` the case document keeps the reading errors
    to itself.
    """

    solution: Solution = field(default_factory=Solution)
    osmometer: Osmometer | None = field(default_factory=Osmometer)
    photometer: Photometer | None = field(default_factory=Photometer)
    capillary: Capillary | None = field(default_factory=Capillary)
    u_stock: float = 0.008
    solids: float = 1.0
    u_solids: float = 0.0
    state_errors: bool = True

    def __post_init__(self) -> None:
        photometer = self.photometer
        if photometer and photometer.quantity == "Kc_R" and self.solids != 1.0:
            raise ValueError("Kc/R is worked out with the c of the table: leave solids at 1")


@dataclass(frozen=True)
class Truth:
    """What a perfect analysis of one laboratory's readings would find."""

    Mn: float
    Mw: float
    Mz: float
    Mv: float
    dispersity: float
    radius_z: float
    limiting_viscosity_number: float
    A2_osmometry: float
    A2_scattering: float
    dn_dc: float
    K: float
    a: float


@dataclass(frozen=True, eq=False)
class Table:
    """One table as the user would type it: headings with units, one column for each."""

    headings: tuple[str, ...]
    columns: tuple[Array, ...]


@dataclass(frozen=True, eq=False)
class Lab:
    """One drawn laboratory: tables by technique, the errors that were drawn, the truth."""

    bench: Bench
    tables: dict[str, Table]
    errors: Errors
    truth: Truth


# --- errors shared by several readings ----------------------------------------------------------


def error_sizes(bench: Bench) -> Errors:
    """Return the standard uncertainty of every shared error, one entry for each member."""
    sizes: dict[str, Sequence[float]] = {
        "stock": [bench.u_stock],
        "solids": [bench.u_solids / bench.solids],
    }
    if bench.osmometer:
        flasks = bench.osmometer.concentrations
        sizes["osmometry_flask"] = [bench.osmometer.u_flask] * len(flasks)
    if bench.photometer:
        sizes |= _photometer_sizes(bench.photometer)
    if bench.capillary:
        flasks = bench.capillary.concentrations
        sizes["viscometry_flask"] = [bench.capillary.u_flask] * len(flasks)
        sizes["K"], sizes["a"] = [bench.capillary.u_K], [bench.capillary.u_a]
    return {name: np.asarray(size, dtype=float) for name, size in sizes.items()}


def _photometer_sizes(photometer: Photometer) -> dict[str, Sequence[float]]:
    return {
        "scattering_flask": [photometer.u_flask] * len(photometer.concentrations),
        "angle": [photometer.u_angle] * len(photometer.angles),
        "dn_dc": [photometer.u_dn_dc],
        "rayleigh_ratio": [photometer.u_rayleigh],
    }


def no_errors(bench: Bench) -> Errors:
    """Every shared error at zero."""
    return {name: np.zeros_like(size) for name, size in error_sizes(bench).items()}


def _stock(errors: Errors) -> float:
    return float(errors["stock"][0] + errors["solids"][0])


def _true_concentration(nominal: Array, bench: Bench, errors: Errors, flask: str) -> Array:
    """Dry polymer in the flasks, in the unit of `nominal`."""
    return bench.solids * nominal * np.exp(-_stock(errors) - errors[flask])


# --- readings without noise ---------------------------------------------------------------------


def _osmometry(polymer: Polymer, bench: Bench, errors: Errors) -> Array:
    """Heads (mm) or pressures (Pa), flask by flask with its replicates.

    pi = R T (c/Mn + A2 c^2 + g A2^2 Mn c^3) (Stockmayer and Casassa 1952); head = pi/(rho g_n).
    """
    osmometer, solution = bench.osmometer, bench.solution
    nominal = np.array(osmometer.concentrations) / 1000.0
    c = _true_concentration(nominal, bench, errors, "osmometry_flask")
    A2, Mn = solution.A2_osmometry, polymer.Mn
    per_volume = c / Mn + A2 * c**2 + solution.g * A2**2 * Mn * c**3  # mol/mL
    pressure = GAS_CONSTANT * solution.temperature * per_volume * 1e6
    head = pressure / (osmometer.liquid_density * 1000.0 * STANDARD_GRAVITY) * 1000.0
    return np.repeat(head if osmometer.quantity == "head" else pressure, osmometer.replicates)


def _true_dn_dc(photometer: Photometer, errors: Errors) -> float:
    shift = -float(errors["dn_dc"][0])
    if photometer.dn_dc_from == "same stock":
        shift += _stock(errors)
    return photometer.dn_dc * math.exp(shift)


def _excess(polymer: Polymer, bench: Bench, errors: Errors) -> Array:
    """True excess Rayleigh ratio, 1/cm, one row for each concentration, one column an angle.

    R = K c/(1/(Mw P(q)) + 2 A2 c + 3 g A2^2 Mw c^2) (Zimm 1948; third term as in Berry and
    Cotts 1997).
    """
    photometer, solution = bench.photometer, bench.solution
    nominal = np.array(photometer.concentrations) / 1000.0
    c = _true_concentration(nominal, bench, errors, "scattering_flask")[:, None]
    n, wavelength = photometer.refractive_index, photometer.wavelength
    K = optical_constant(n, _true_dn_dc(photometer, errors), wavelength)
    q = scattering_vector(n, wavelength, np.array(photometer.angles))
    mass = polymer.scattering_mass(q, solution.K_s, solution.nu)[None, :]
    A2 = solution.A2_scattering
    return K * c / (1.0 / mass + 2.0 * A2 * c + 3.0 * solution.g * A2**2 * polymer.Mw * c**2)


def _scattering(polymer: Polymer, bench: Bench, errors: Errors) -> Array:
    """Scattering column of the table, row by row: by concentration, then by angle."""
    photometer = bench.photometer
    factor = np.exp(errors["rayleigh_ratio"] + errors["angle"])[None, :]
    excess = _excess(polymer, bench, errors)
    if photometer.quantity == "R_total":
        solvent = np.zeros((1, len(photometer.angles)))
        return ((np.vstack([solvent, excess]) + photometer.R_solvent) * factor).ravel()
    if photometer.quantity == "Kc_R":
        n, wavelength = photometer.refractive_index, photometer.wavelength
        K = optical_constant(n, photometer.dn_dc, wavelength)
        c = np.array(photometer.concentrations)[:, None] / 1000.0
        return (K * c / (excess * factor)).ravel()
    return (excess * factor).ravel()


def _true_mark_houwink(capillary: Capillary, errors: Errors) -> tuple[float, float]:
    """K (mL/g) and a that hold for uniform chains."""
    a = capillary.a - float(errors["a"][0])
    K = capillary.K * capillary.M_ref ** (capillary.a - a) * math.exp(-float(errors["K"][0]))
    if capillary.calibrated_on == "Mw":
        K /= calibration_factor(a, capillary.calibration_dispersity)
    return K, a


def _viscosity_number(polymer: Polymer, capillary: Capillary, errors: Errors) -> float:
    """Limiting viscosity number sum w K M^a, mL/g (Philippoff's rule, as in Flory 1953)."""
    K, a = _true_mark_houwink(capillary, errors)
    return K * polymer.mean(a)


def _viscometry(polymer: Polymer, bench: Bench, errors: Errors) -> Array:
    """Flow times, s, solvent first, each flask with its replicates.

    t/t0 = 1 + x + k x^2 + k3 x^3, x = [eta] c (Huggins 1942), or 1 + x exp(k x) (Martin 1942).
    """
    capillary, solution = bench.capillary, bench.solution
    nominal = np.array(capillary.concentrations) / 100.0
    c = _true_concentration(nominal, bench, errors, "viscometry_flask")
    x = _viscosity_number(polymer, capillary, errors) * np.concatenate([[0.0], c])
    k = solution.k_viscosity
    if solution.form == "martin":
        increment = x * np.exp(k * x)
    else:
        increment = x + k * x**2 + solution.k3 * x**3
    return np.repeat(capillary.t0 * (1.0 + increment), capillary.replicates)


def signals(polymer: Polymer, bench: Bench, errors: Errors | None = None) -> dict[str, Array]:
    """Return the readings without noise, by technique and in table order, for given errors."""
    errors = no_errors(bench) if errors is None else errors
    made = {}
    if bench.osmometer:
        made["osmometry"] = _osmometry(polymer, bench, errors)
    if bench.photometer:
        made["light_scattering"] = _scattering(polymer, bench, errors)
    if bench.capillary:
        made["viscometry"] = _viscometry(polymer, bench, errors)
    return made


def _noise(bench: Bench, made: dict[str, Array]) -> dict[str, Array]:
    """Return the standard deviation of each reading: constant, but relative for scattering."""
    sd = {}
    if bench.osmometer:
        sd["osmometry"] = np.full_like(made["osmometry"], bench.osmometer.u_reading)
    if bench.photometer:
        sd["light_scattering"] = bench.photometer.u_reading * made["light_scattering"]
    if bench.capillary:
        sd["viscometry"] = np.full_like(made["viscometry"], bench.capillary.u_reading)
    return sd


# --- one drawn laboratory -----------------------------------------------------------------------


def true_values(polymer: Polymer, bench: Bench, errors: Errors | None = None) -> Truth:
    """Return the true averages and constants, given the drawn errors; NaN where not measured."""
    errors = no_errors(bench) if errors is None else errors
    solution, nan = bench.solution, math.nan
    K, a = _true_mark_houwink(bench.capillary, errors) if bench.capillary else (nan, nan)
    return Truth(
        Mn=polymer.Mn,
        Mw=polymer.Mw,
        Mz=polymer.Mz,
        Mv=polymer.Mv(a) if bench.capillary else nan,
        dispersity=polymer.dispersity,
        radius_z=polymer.radius_z(solution.K_s, solution.nu),
        limiting_viscosity_number=K * polymer.mean(a) if bench.capillary else nan,
        A2_osmometry=solution.A2_osmometry,
        A2_scattering=solution.A2_scattering,
        dn_dc=_true_dn_dc(bench.photometer, errors) if bench.photometer else nan,
        K=K,
        a=a,
    )


def draw_lab(polymer: Polymer, bench: Bench, rng: np.random.Generator) -> Lab:
    """Draw every error once (Gaussian) and return what that laboratory would have noted down."""
    errors = {name: rng.normal(0.0, size) for name, size in error_sizes(bench).items()}
    made = signals(polymer, bench, errors)
    sd = _noise(bench, made)
    noted = {name: rng.normal(made[name], sd[name]) for name in made}
    tables = {name: TABLES[name](bench, values) for name, values in noted.items()}
    return Lab(bench, tables, errors, true_values(polymer, bench, errors))


def _osmometry_table(bench: Bench, values: Array) -> Table:
    osmometer = bench.osmometer
    heading = {"head": "head [mm]", "pi": "pi [Pa]"}[osmometer.quantity]
    c = np.repeat(osmometer.concentrations, osmometer.replicates)
    return Table(("c [g/L]", heading), (c, values))


def _scattering_table(bench: Bench, values: Array) -> Table:
    photometer = bench.photometer
    units = {"R": "R [1/cm]", "R_total": "R_total [1/cm]", "Kc_R": "Kc_R [mol/g]"}
    flasks = [0.0] * (photometer.quantity == "R_total") + list(photometer.concentrations)
    c = np.repeat(flasks, len(photometer.angles))
    angle = np.tile(photometer.angles, len(flasks))
    return Table(("c [g/L]", "angle [deg]", units[photometer.quantity]), (c, angle, values))


def _viscometry_table(bench: Bench, values: Array) -> Table:
    capillary = bench.capillary
    c = np.repeat([0.0, *capillary.concentrations], capillary.replicates)
    return Table(("c [g/dL]", "t [s]"), (c, values))


TABLES: dict[str, Callable[[Bench, Array], Table]] = {
    "osmometry": _osmometry_table,
    "light_scattering": _scattering_table,
    "viscometry": _viscometry_table,
}


# --- files --------------------------------------------------------------------------------------

FILES = {
    "osmometry": "osmometry.csv",
    "light_scattering": "scattering.csv",
    "viscometry": "viscometry.csv",
}
AS_SHOWN = {"osmometry": "{:.1f}", "light_scattering": "{:.4g}", "viscometry": "{:.2f}"}


def write_tables(lab: Lab, folder: Path, *, rounded: bool = False) -> None:
    """Write the tables, in full or as an instrument shows them (0.1 mm, 4 digits, 0.01 s)."""
    for technique, table in lab.tables.items():
        shown = AS_SHOWN[technique].format if rounded else repr
        *known, reading = (column.tolist() for column in table.columns)
        columns = [*([f"{v:.10g}" for v in values] for values in known), map(shown, reading)]
        with (Path(folder) / FILES[technique]).open("w", encoding="utf-8", newline="") as file:
            writer = csv.writer(file, lineterminator="\n")
            writer.writerow(table.headings)
            writer.writerows(zip(*columns, strict=True))


def _percent(u: float) -> str:
    return f'"{100.0 * u:.10g} %"'


def _line(key: str, value: str) -> str:
    return f"{key} = {value}"


def _uncertainties(bench: Bench, reading: str, u_flask: float) -> list[str]:
    lines = [_line("u_reading", reading)] if bench.state_errors else []
    return lines + ([_line("u_concentration", _percent(u_flask))] if u_flask else [])


def _conditions(bench: Bench, technique: str, name: str) -> list[str]:
    return [
        f"[[{technique}]]",
        _line("name", f'"{name}"'),
        _line("readings", f'"{FILES[technique]}"'),
        _line("solvent", f'"{bench.solution.solvent}"'),
        _line("temperature", f'"{bench.solution.temperature:.10g} K"'),
    ]


def _effects_of(bench: Bench) -> dict[str, tuple[str, float]]:
    """Return the effects of a bench that are not zero: id to (target, standard uncertainty)."""
    found = {"stock": ("concentration", bench.u_stock)}
    if bench.photometer:
        found["dn_dc"] = ("dn_dc", bench.photometer.u_dn_dc)
        found["standard"] = ("rayleigh_ratio", bench.photometer.u_rayleigh)
    return {name: (target, u) for name, (target, u) in found.items() if u > 0.0}


def _effects_line(bench: Bench, *candidates: str) -> str:
    named = [f'"{name}"' for name in candidates if name in _effects_of(bench)]
    return _line("effects", f"[{', '.join(named)}]")


def _osmometry_lines(bench: Bench) -> list[str]:
    osmometer = bench.osmometer
    unit = {"head": "mm", "pi": "Pa"}[osmometer.quantity]
    return [
        *_conditions(bench, "osmometry", "osmometer"),
        _line("liquid_density", f'"{osmometer.liquid_density!r} g/mL"'),
        *_uncertainties(bench, f'"{osmometer.u_reading!r} {unit}"', osmometer.u_flask),
        _effects_line(bench, "stock"),
    ]


def _scattering_lines(bench: Bench) -> list[str]:
    photometer = bench.photometer
    origin = f'from = "{photometer.dn_dc_from}"'
    if photometer.dn_dc_from == "same stock":
        origin += ', effect = "stock"'
    wavelength = f'"{photometer.wavelength:.10g} nm"'
    dn_dc = f'{{ value = "{photometer.dn_dc!r} mL/g", wavelength = {wavelength}, {origin} }}'
    return [
        *_conditions(bench, "light_scattering", "goniometer"),
        _line("wavelength", wavelength),
        _line("polarisation", '"vertical"'),
        _line("refractive_index", repr(photometer.refractive_index)),
        _line("dn_dc", dn_dc),
        *_uncertainties(bench, _percent(photometer.u_reading), photometer.u_flask),
        _effects_line(bench, "stock", "dn_dc", "standard"),
    ]


def _mark_houwink_text(capillary: Capillary) -> str:
    parts = [
        f'K = "{capillary.K!r} mL/g"',
        f"a = {capillary.a!r}",
        f"u_K = {_percent(capillary.u_K)}",
        f"u_a = {capillary.u_a!r}",
        f'M_ref = "{capillary.M_ref:.10g} g/mol"',
        f'calibrated_on = "{capillary.calibrated_on}"',
    ]
    if capillary.calibrated_on == "Mw":
        parts.append(f"calibration_dispersity = {capillary.calibration_dispersity!r}")
    return "{ " + ", ".join([*parts, 'source = "synthetic"']) + " }"


def _viscometry_lines(bench: Bench) -> list[str]:
    capillary = bench.capillary
    return [
        *_conditions(bench, "viscometry", "capillary"),
        *_uncertainties(bench, f'"{capillary.u_reading!r} s"', capillary.u_flask),
        _line("mark_houwink", _mark_houwink_text(capillary)),
        _effects_line(bench, "stock"),
    ]


MEASUREMENTS: dict[str, Callable[[Bench], list[str]]] = {
    "osmometry": _osmometry_lines,
    "light_scattering": _scattering_lines,
    "viscometry": _viscometry_lines,
}


def _head_lines(bench: Bench) -> list[str]:
    lines = [
        "case = 1",
        "",
        "[sample]",
        'name = "synthetic sample"',
        'polymer = "poly(vinyl acetate)"',
        'architecture = "linear"',
        'composition = "homopolymer"',
    ]
    if bench.solids != 1.0 or bench.u_solids:
        lines.append(f"solids = {{ value = {bench.solids!r}, u = {bench.u_solids!r} }}")
    for name, (target, u) in _effects_of(bench).items():
        lines += ["", f"[effects.{name}]", f'target = "{target}"', _line("u", _percent(u))]
    return lines


def lab_to_files(lab: Lab, folder: Path | str, *, rounded: bool = False) -> Path:
    """Write the case document and its tables into a folder; return the document's path."""
    folder = Path(folder)
    folder.mkdir(parents=True, exist_ok=True)
    write_tables(lab, folder, rounded=rounded)
    lines = _head_lines(lab.bench)
    for technique in lab.tables:
        lines += ["", *MEASUREMENTS[technique](lab.bench)]
    path = folder / "case.toml"
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")
    return path


# --- the oracle ---------------------------------------------------------------------------------


@dataclass(frozen=True)
class Oracle:
    """Standard deviations of the oracle's ln Mn, ln Mw and ln(Mw/Mn)."""

    ln_Mn: float
    ln_Mw: float
    ln_dispersity: float


Point: TypeAlias = dict[str, float]


def _unknowns(bench: Bench, *, k_viscosity_known: bool) -> list[str]:
    """Names of what the oracle must find out, the distribution first."""
    names = ["ln_Mw", "ln_dispersity"]
    if bench.osmometer:
        names.append("A2_osmometry")
    if bench.photometer:
        names.append("A2_scattering")
        names += ["ln_K_s"] if bench.solution.K_s > 0.0 else []
    if bench.capillary:
        names.append("t0")
        names += [] if k_viscosity_known else ["k_viscosity"]
    return names


def _readings_at(family: str, Mw: float, dispersity: float, bench: Bench, moved: Point) -> Array:
    """All readings in one vector after moving unknowns by `moved`.

    The dispersity moves in ln(dispersity - 1), its own step scaled to one of ln(dispersity), so
    that it stays above 1.
    """
    stretch = moved.get("ln_dispersity", 0.0) * dispersity / (dispersity - 1.0)
    shape = 1.0 + (dispersity - 1.0) * math.exp(stretch)
    polymer = FAMILIES[family](Mw * math.exp(moved.get("ln_Mw", 0.0)), shape)
    solution = bench.solution
    solution = replace(
        solution,
        A2_osmometry=solution.A2_osmometry + moved.get("A2_osmometry", 0.0),
        A2_scattering=solution.A2_scattering + moved.get("A2_scattering", 0.0),
        K_s=solution.K_s * math.exp(moved.get("ln_K_s", 0.0)),
        k_viscosity=solution.k_viscosity + moved.get("k_viscosity", 0.0),
    )
    capillary = bench.capillary
    if capillary:
        capillary = replace(capillary, t0=capillary.t0 + moved.get("t0", 0.0))
    moved_bench = replace(bench, solution=solution, capillary=capillary)
    return np.concatenate(list(signals(polymer, moved_bench).values()))


def _sensitivities(
    family: str, Mw: float, dispersity: float, bench: Bench, names: list[str]
) -> Array:
    """Central differences of all readings by the unknowns, one column each."""
    steps = dict.fromkeys(names, 1e-4) | {
        "A2_osmometry": 1e-8,
        "A2_scattering": 1e-8,
        "ln_dispersity": 1e-3 * (dispersity - 1.0) / dispersity,
    }
    columns = []
    for name in names:
        up, down = (
            _readings_at(family, Mw, dispersity, bench, {name: sign * steps[name]})
            for sign in (1.0, -1.0)
        )
        columns.append((up - down) / (2.0 * steps[name]))
    return np.column_stack(columns)


def _shared_columns(polymer: Polymer, bench: Bench) -> Array:
    """Change of all readings by one standard uncertainty of every shared error, a column each."""
    columns = []
    for name, sizes in error_sizes(bench).items():
        for index in np.flatnonzero(sizes):
            up, down = no_errors(bench), no_errors(bench)
            up[name][index], down[name][index] = 1e-5, -1e-5
            high, low = signals(polymer, bench, up), signals(polymer, bench, down)
            slope = [(high[key] - low[key]) / 2e-5 for key in high]
            columns.append(np.concatenate(slope) * sizes[index])
    return np.array(columns).T


def _covariance(polymer: Polymer, bench: Bench) -> Array:
    """Covariance of all readings: their own noise and every shared error as a random term."""
    made = signals(polymer, bench)
    noise = np.concatenate(list(_noise(bench, made).values()))
    covariance = np.diag(noise**2)
    shared = _shared_columns(polymer, bench)
    return covariance + shared @ shared.T if shared.size else covariance


def oracle_sd(
    family: str, Mw: float, dispersity: float, bench: Bench, *, k_viscosity_known: bool = True
) -> Oracle:
    """Standard deviations that an all-knowing linear-Gaussian analysis would reach.

    It knows the family, g, k3, nu and (unless told otherwise) k of the viscosity equation, and
    the size, not the value, of every random error. Unknown are Mw, the dispersity, A2 of each
    technique, K_s of the radius law and t0. Generalised least squares (Aitken 1935) on the raw
    readings linearised at the truth: (J' C^-1 J)^-1. Nothing keeps the dispersity above 1, so
    near 1 the numbers describe the unbounded estimator. With too few techniques to determine
    the distribution the answer is infinite.
    """
    polymer = FAMILIES[family](Mw, dispersity)
    names = _unknowns(bench, k_viscosity_known=k_viscosity_known)
    J = _sensitivities(family, Mw, dispersity, bench, names)
    whitened = np.linalg.solve(np.linalg.cholesky(_covariance(polymer, bench)), J)
    lengths = np.linalg.norm(whitened, axis=0)
    _, values, vectors = np.linalg.svd(whitened / lengths, full_matrices=False)
    if values[-1] < 1e-6 * values[0]:
        return Oracle(math.inf, math.inf, math.inf)
    root = (vectors.T / values) / lengths[:, None]
    ln_Mw, ln_D = root[0], root[1]
    sd = [float(np.linalg.norm(row)) for row in (ln_Mw - ln_D, ln_Mw, ln_D)]
    return Oracle(*sd)
