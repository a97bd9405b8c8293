"""The generator against closed results, published numbers and brute force."""

import csv
import math
import tomllib
from dataclasses import replace

import make_example
import numpy as np
import pytest
from generator import (
    FAMILIES,
    Bench,
    Capillary,
    Osmometer,
    Photometer,
    Solution,
    calibration_factor,
    debye_coil,
    draw_lab,
    error_sizes,
    from_density,
    lab_to_files,
    log_normal,
    mixture,
    no_errors,
    optical_constant,
    oracle_sd,
    scattering_vector,
    schulz_zimm,
    signals,
    true_values,
    uniform,
)

DISPERSITIES = (1.0001, 1.05, 1.2, 2.0, 4.0)
IDEAL = Solution(A2_osmometry=0.0, A2_scattering=0.0, g=0.0, k_viscosity=0.0, k3=0.0)


# --- averages -----------------------------------------------------------------------------------


@pytest.mark.parametrize("family", FAMILIES)
@pytest.mark.parametrize("dispersity", DISPERSITIES)
def test_grid_has_the_averages_it_was_asked_for(family, dispersity):
    polymer = FAMILIES[family](1e5, dispersity)
    assert polymer.w.sum() == pytest.approx(1.0, abs=1e-12)
    assert polymer.Mw == pytest.approx(1e5, rel=1e-10)
    assert polymer.dispersity == pytest.approx(dispersity, rel=1e-10)
    expected = {"schulz-zimm": 2.0 - 1.0 / dispersity, "log-normal": dispersity}[family]
    assert polymer.Mz / polymer.Mw == pytest.approx(expected, rel=1e-10)


@pytest.mark.parametrize("dispersity", DISPERSITIES)
def test_viscosity_average_of_schulz_zimm(dispersity):
    k, a = 1.0 / (dispersity - 1.0), 0.71
    log_ratio = (math.lgamma(k + 1.0 + a) - math.lgamma(k + 1.0)) / a - math.log(k + 1.0)
    assert schulz_zimm(1.0, dispersity).Mv(a) == pytest.approx(math.exp(log_ratio), rel=1e-8)


@pytest.mark.parametrize("dispersity", DISPERSITIES)
def test_viscosity_average_of_log_normal(dispersity):
    assert log_normal(1.0, dispersity).Mv(0.71) == pytest.approx(dispersity**-0.145, rel=1e-10)


def test_published_viscosity_averages():
    assert schulz_zimm(1.0, 2.5).Mv(0.7) == pytest.approx(0.91802, abs=1e-5)
    assert log_normal(1.0, 2.5).Mv(0.7) == pytest.approx(0.87158, abs=1e-5)


def test_generalised_gamma_by_its_density():
    # density by mass prop. to M^1.7 exp(-M^0.8); averages of an independent quadrature
    polymer = from_density(lambda x: np.exp(2.7 * x - np.exp(0.8 * x)), 1e-9, 1e3)
    found = (polymer.Mn, polymer.Mw, polymer.Mz)
    assert found == pytest.approx((2.73994, 4.77586, 7.00333), abs=6e-6)


def test_mixture_adds_by_mass():
    blend = mixture([(3.0, uniform(1e5)), (1.0, uniform(5e5))])
    assert pytest.approx(2e5) == blend.Mw
    assert pytest.approx(1.0 / (0.75 / 1e5 + 0.25 / 5e5)) == blend.Mn
    assert np.all(np.diff(blend.M) > 0.0)


@pytest.mark.parametrize(("dispersity", "family", "ratio"), [
    (1.1, "schulz-zimm", 1.06), (1.5, "schulz-zimm", 1.20), (2.0, "schulz-zimm", 1.29),
    (1.1, "log-normal", 1.06), (1.5, "log-normal", 1.30), (2.0, "log-normal", 1.56),
])  # fmt: skip
def test_z_average_radius_over_that_of_a_chain_of_mass_Mw(dispersity, family, ratio):  # noqa: N802
    polymer = FAMILIES[family](1e5, dispersity)
    assert polymer.radius_z(0.01, 0.588) / (0.01 * 1e5**0.588) == pytest.approx(ratio, abs=0.006)


def test_flory_fox_factor_of_newman():
    polymer = schulz_zimm(1.0, 2.0)  # theta solvent: q = <M^2>^1.5/(Mw^2.5 <M^0.5>)
    q = polymer.mean(2.0) ** 1.5 / (polymer.Mw**2.5 * polymer.mean(0.5))
    assert q == pytest.approx(1.95441, abs=5e-6)


def test_dispersity_out_of_reach_is_refused():
    with pytest.raises(ValueError, match="above 1"):
        schulz_zimm(1e5, 1.0)


# --- light scattering ---------------------------------------------------------------------------


def test_debye_series_joins_the_closed_form():
    u = np.array([0.00999999, 0.01000001])
    assert np.diff(debye_coil(u))[0] == pytest.approx(-2e-8 / 3.0, rel=0.02)
    assert debye_coil(np.array([0.0, 1.0])) == pytest.approx([1.0, 2.0 / math.e], rel=1e-14)


@pytest.mark.parametrize("u_z", [0.01, 0.5, 3.0, 30.0])
def test_zimm_is_exact_for_the_most_probable_distribution(u_z):
    polymer = schulz_zimm(1e5, 2.0)
    q = math.sqrt(u_z) / (polymer.radius_z(0.03, 0.5) * 1e-7)
    form_factor = polymer.scattering_mass(q, 0.03, 0.5)[0] / polymer.Mw
    assert form_factor == pytest.approx(1.0 / (1.0 + u_z / 3.0), rel=1e-9)


@pytest.mark.parametrize(("n", "dn_dc", "wavelength", "K"), [
    (1.4025, 0.185, 632.8, 2.752e-7),
    (1.4025, 0.185, 658.0, 2.354e-7),
    (1.4910, 0.110, 632.8, 1.100e-7),
])  # fmt: skip
def test_optical_constant(n, dn_dc, wavelength, K):
    assert optical_constant(n, dn_dc, wavelength) == pytest.approx(K, rel=3e-4)


def photometer_for_tetrahydrofuran(**more):
    return Photometer(
        concentrations=(2.0,), angles=(90.0,), wavelength=632.8,
        refractive_index=1.4025, dn_dc=0.185, **more,
    )  # fmt: skip


@pytest.mark.parametrize(("A2", "R"), [(5e-4, 4.587e-5), (0.0, 5.505e-5)])
def test_rayleigh_ratio_of_a_worked_example(A2, R):
    solution = replace(IDEAL, A2_scattering=A2, K_s=0.0)
    bench = Bench(solution, photometer=photometer_for_tetrahydrofuran())
    assert signals(uniform(1e5), bench)["light_scattering"][0] == pytest.approx(R, rel=2e-4)


def test_third_virial_term_makes_the_square_root_straight_at_one_third():
    photometer = replace(Photometer(), quantity="Kc_R", angles=(90.0,), concentrations=(1, 2, 3, 4))
    solution = Solution(A2_scattering=5e-4, g=1.0 / 3.0, K_s=0.0)
    Kc_R = signals(uniform(2e5), Bench(solution, photometer=photometer))["light_scattering"]
    assert np.diff(np.sqrt(Kc_R), 2) == pytest.approx(0.0, abs=1e-15)


def test_radius_from_the_initial_slope_of_an_angular_series():
    angles = (1.0, 2.0)
    photometer = Photometer(concentrations=(1.0,), angles=angles)
    bench = Bench(replace(IDEAL, K_s=0.0158, nu=0.57), photometer=photometer)
    polymer = log_normal(2e5, 1.8)
    inverse = 1.0 / signals(polymer, bench)["light_scattering"]
    q2 = scattering_vector(1.376, 633.0, np.array(angles)) ** 2
    slope = (inverse[1] / inverse[0] - 1.0) / (q2[1] - q2[0])
    assert math.sqrt(3.0 * slope) * 1e7 == pytest.approx(polymer.radius_z(0.0158, 0.57), rel=1e-3)


def test_total_and_reduced_readings_are_the_same_experiment():
    polymer = schulz_zimm(2e5, 2.0)
    made = {}
    for quantity in ("R", "R_total", "Kc_R"):
        bench = Bench(photometer=Photometer(quantity=quantity, R_solvent=4e-6))
        errors = no_errors(bench)
        errors["dn_dc"][:], errors["angle"][3] = 0.02, 0.01
        made[quantity] = signals(polymer, bench, errors)["light_scattering"].reshape(-1, 9)
    total = made["R_total"]
    np.testing.assert_allclose(total[1:] - total[0], made["R"], rtol=1e-12)
    K = optical_constant(1.376, 0.080, 633.0)
    c = np.array([1.0, 2.0, 3.0, 4.0, 5.0])[:, None] / 1000.0
    np.testing.assert_allclose(K * c / made["R"], made["Kc_R"], rtol=1e-12)


# --- osmometry and viscometry -------------------------------------------------------------------


def test_ideal_osmotic_pressure():
    bench = Bench(IDEAL, osmometer=Osmometer(concentrations=(1.0,), replicates=1, quantity="pi"))
    assert signals(uniform(1e5), bench)["osmometry"][0] == pytest.approx(24.79, abs=0.005)


def test_head_of_toluene():
    osmometer = Osmometer(concentrations=(5.0,), replicates=1, liquid_density=0.8622)
    head = signals(uniform(1e5), Bench(IDEAL, osmometer=osmometer))["osmometry"][0]
    assert head == pytest.approx(14.7, abs=0.05)  # mm; 1.47 cm


def test_square_root_of_reduced_pressure_is_straight_at_one_quarter():
    osmometer = Osmometer(concentrations=(2.0, 4.0, 6.0), replicates=1, quantity="pi")
    bench = Bench(Solution(g=0.25), osmometer=osmometer)
    reduced = signals(log_normal(2e5, 2.0), bench)["osmometry"] / np.array([2.0, 4.0, 6.0])
    assert np.diff(np.sqrt(reduced), 2)[0] == pytest.approx(0.0, abs=1e-12)


def test_calibration_on_whole_polymers_of_dispersity_two():
    expected = math.gamma(2.71) / 2.0**0.71
    assert calibration_factor(0.71, 2.0) == pytest.approx(expected, rel=1e-10)
    capillary = Capillary(calibrated_on="Mw")
    truth = true_values(schulz_zimm(3e5, 2.0), Bench(capillary=capillary))
    assert truth.limiting_viscosity_number == pytest.approx(1.07e-2 * 3e5**0.71, rel=1e-10)


@pytest.mark.parametrize("form", ["huggins", "martin"])
def test_viscosity_equations_share_their_first_two_terms(form):
    capillary = Capillary(concentrations=(0.01, 0.02), replicates=1)
    bench = Bench(Solution(form=form), capillary=capillary)
    polymer = schulz_zimm(2e5, 2.0)
    t0, *t = signals(polymer, bench)["viscometry"]
    x = true_values(polymer, bench).limiting_viscosity_number * np.array([1e-4, 2e-4])
    assert t0 == 180.0
    increment = np.array(t) / t0 - 1.0
    assert (increment / x - 1.0) / x == pytest.approx([0.36, 0.36], abs=2e-3)


def test_martin_solution_seen_through_a_huggins_line():
    # k = 0.5, x = 0.2 to 0.8: intercept 0.970 of the truth (physics of the extrapolation forms)
    capillary = Capillary(concentrations=(2.0, 4.0, 6.0, 8.0), replicates=1, K=10.0, a=1e-12)
    solution = Solution(form="martin", k_viscosity=0.5)
    t0, *t = signals(uniform(1.0), Bench(solution, capillary=capillary))["viscometry"]
    x = np.array([0.2, 0.4, 0.6, 0.8])
    slope, intercept = np.polyfit(x, (np.array(t) / t0 - 1.0) / x, 1)
    assert intercept == pytest.approx(0.970, abs=5e-4)
    assert slope / intercept**2 == pytest.approx(0.68, abs=0.01)


# --- errors -------------------------------------------------------------------------------------


def apparent(bench, polymer, **errors):
    """Ideal-solution Mn, Mw and [eta] as a user would work them out from the stated constants."""
    given = no_errors(bench)
    for name, value in errors.items():
        given[name][:] = value
    made = signals(polymer, bench, given)
    RT = 8.314462618 * 298.15
    K = optical_constant(1.376, 0.080, 633.0)
    Mn = RT * 1000.0 / made["osmometry"][0]
    Mw = made["light_scattering"][0] / (K * 1e-3)
    eta = (made["viscometry"][1] / made["viscometry"][0] - 1.0) / 0.01
    return np.array([Mn, Mw, eta])


@pytest.mark.parametrize(("dn_dc_from", "errors", "factors"), [
    ("literature", {"stock": math.log(1.05)}, (1.05, 1 / 1.05, 1 / 1.05)),
    ("same stock", {"stock": math.log(1.05)}, (1.05, 1.05, 1 / 1.05)),
    ("literature", {"osmometry_flask": 0.03}, (math.exp(0.03), 1, 1)),
    ("literature", {"scattering_flask": 0.03}, (1, math.exp(-0.03), 1)),
    ("literature", {"viscometry_flask": 0.03}, (1, 1, math.exp(-0.03))),
    ("literature", {"dn_dc": 0.03}, (1, math.exp(-0.06), 1)),
    ("literature", {"rayleigh_ratio": 0.03}, (1, math.exp(0.03), 1)),
    ("literature", {"angle": 0.03}, (1, math.exp(0.03), 1)),
    ("literature", {"K": 0.03}, (1, 1, math.exp(-0.03))),
    ("literature", {"a": 0.01}, (1, 1, 0.5**0.01 * 1e5**-0.01 * 1.5e5**0.01 * 2**0.01)),
])  # fmt: skip
def test_sign_of_every_error(dn_dc_from, errors, factors):
    bench = Bench(
        replace(IDEAL, K_s=0.0),
        Osmometer(concentrations=(1.0,), replicates=1, quantity="pi"),
        Photometer(concentrations=(1.0,), angles=(90.0,), dn_dc_from=dn_dc_from),
        Capillary(concentrations=(1.0,), replicates=1),
    )
    polymer = uniform(1e5)
    ratio = apparent(bench, polymer, **errors) / apparent(bench, polymer)
    np.testing.assert_allclose(ratio, factors, rtol=1e-10)


def test_solids_scale_what_was_weighed():
    polymer, weighed = schulz_zimm(2e5, 2.0), Bench(solids=0.9)
    dry = Bench(
        osmometer=Osmometer(concentrations=tuple(0.9 * c for c in Osmometer().concentrations))
    )
    np.testing.assert_allclose(
        signals(polymer, weighed)["osmometry"], signals(polymer, dry)["osmometry"], rtol=1e-12
    )
    with pytest.raises(ValueError, match="solids"):
        Bench(solids=0.9, photometer=Photometer(quantity="Kc_R"))


def test_drawn_errors_have_their_stated_size_and_come_again_with_the_seed():
    polymer, bench = uniform(1e5), Bench(photometer=Photometer(u_angle=0.01), u_solids=0.004)
    rng = np.random.default_rng(1)
    labs = [draw_lab(polymer, bench, rng) for _ in range(1500)]
    for name, size in error_sizes(bench).items():
        drawn = np.array([lab.errors[name] for lab in labs])
        np.testing.assert_allclose(drawn.std(axis=0), size, rtol=0.09)
        assert np.all(np.abs(drawn.mean(axis=0)) < 4.5 * size / math.sqrt(1500))
    again = draw_lab(polymer, bench, np.random.default_rng(1))
    for name, table in again.tables.items():
        np.testing.assert_array_equal(table.columns[-1], labs[0].tables[name].columns[-1])


def test_noise_about_the_signals_has_its_stated_size():
    polymer, bench = schulz_zimm(2e5, 2.0), Bench()
    lab_of = [draw_lab(polymer, bench, np.random.default_rng(seed)) for seed in range(400)]
    left = {name: [] for name in lab_of[0].tables}
    for lab in lab_of:
        for name, made in signals(polymer, bench, lab.errors).items():
            scale = made if name == "light_scattering" else 1.0
            left[name].append((lab.tables[name].columns[-1] - made) / scale)
    sd = {name: float(np.std(values)) for name, values in left.items()}
    expected = {"osmometry": 0.1, "light_scattering": 0.01, "viscometry": 0.05}
    assert sd == pytest.approx(expected, rel=0.05)


# --- the oracle ---------------------------------------------------------------------------------


def spread(rows):
    ln_Mn, ln_Mw = np.log(np.array(rows)).T
    return [float(np.std(values)) for values in (ln_Mn, ln_Mw, ln_Mw - ln_Mn)]


def as_list(oracle):
    return [oracle.ln_Mn, oracle.ln_Mw, oracle.ln_dispersity]


@pytest.mark.slow
def test_oracle_is_the_only_estimator_where_two_flasks_settle_two_unknowns():
    bench = Bench(
        Solution(A2_osmometry=3e-4, A2_scattering=3e-4, g=0.0, K_s=0.0),
        Osmometer(concentrations=(4.0, 8.0), replicates=1, quantity="pi", u_reading=2.0),
        Photometer(concentrations=(2.0, 4.0), angles=(90.0,), u_angle=0.01),
        None,
    )
    polymer, rng, rows = log_normal(1e5, 1.5), np.random.default_rng(7), []
    RT, K = 8.314462618 * 298.15 * 1e6, optical_constant(1.376, 0.080, 633.0)
    for _ in range(6000):
        tables = draw_lab(polymer, bench, rng).tables
        y1, y2 = tables["osmometry"].columns[-1] / (RT * np.array([4e-3, 8e-3]))
        z1, z2 = K * np.array([2e-3, 4e-3]) / tables["light_scattering"].columns[-1]
        rows.append((1.0 / (2.0 * y1 - y2), 1.0 / (2.0 * z1 - z2)))
    expected = as_list(oracle_sd("log-normal", 1e5, 1.5, bench))
    assert spread(rows) == pytest.approx(expected, rel=0.04)


@pytest.mark.slow
def test_oracle_of_osmometry_and_viscometry_against_the_closed_solution():
    bench = Bench(
        replace(IDEAL, g=0.0),
        Osmometer(concentrations=(4.0, 8.0), replicates=1, quantity="pi", u_reading=1.0),
        None,
        Capillary(concentrations=(0.5,), replicates=1, M_ref=1e5, u_K=0.02, u_a=0.005),
    )
    polymer, rng, rows = log_normal(1e5, 1.5), np.random.default_rng(8), []
    RT, a = 8.314462618 * 298.15 * 1e6, 0.71
    for _ in range(6000):
        tables = draw_lab(polymer, bench, rng).tables
        y1, y2 = tables["osmometry"].columns[-1] / (RT * np.array([4e-3, 8e-3]))
        t0, t = tables["viscometry"].columns[-1]
        ln_Mn, ln_Mv = -math.log(2.0 * y1 - y2), math.log((t / t0 - 1.0) / 5e-3 / 1.07e-2) / a
        # ln Mv = ln Mn + (1 + a)/2 ln D
        ln_D = 2.0 * (ln_Mv - ln_Mn) / (1.0 + a)
        rows.append((math.exp(ln_Mn), math.exp(ln_Mn + ln_D)))
    expected = as_list(oracle_sd("log-normal", 1e5, 1.5, bench))
    assert spread(rows) == pytest.approx(expected, rel=0.04)


def test_oracle_cannot_divide_one_average_by_nothing():
    assert (
        oracle_sd("schulz-zimm", 1e5, 2.0, Bench(photometer=None, capillary=None)).ln_Mn == math.inf
    )


@pytest.mark.parametrize("family", FAMILIES)
@pytest.mark.parametrize("dispersity", DISPERSITIES)
def test_oracle_gains_by_every_technique(family, dispersity):
    def sd(bench):
        return oracle_sd(family, 1e5, dispersity, bench).ln_dispersity

    whole = sd(Bench())
    assert 0.02 < whole < sd(Bench(capillary=None)) < 0.06
    assert whole < sd(Bench(photometer=None)) < 0.1


def test_oracle_pays_for_what_it_does_not_know():
    known = oracle_sd("log-normal", 1e5, 2.0, Bench())
    unknown = oracle_sd("log-normal", 1e5, 2.0, Bench(), k_viscosity_known=False)
    assert known.ln_Mw < unknown.ln_Mw


# --- files --------------------------------------------------------------------------------------


def read_table(path):
    with path.open(encoding="utf-8", newline="") as file:
        heading, *rows = csv.reader(file)
    return heading, np.array(rows, dtype=float)


def test_files_hold_the_readings_in_full(tmp_path):
    lab = draw_lab(schulz_zimm(2e5, 2.0), Bench(), np.random.default_rng(3))
    path = lab_to_files(lab, tmp_path / "case")
    document = tomllib.loads(path.read_text(encoding="utf-8"))
    for technique, table in lab.tables.items():
        (measurement,) = document[technique]
        heading, rows = read_table(path.parent / measurement["readings"])
        assert tuple(heading) == table.headings
        np.testing.assert_array_equal(rows, np.column_stack(table.columns))
        assert set(measurement["effects"]) <= set(document["effects"])


def test_files_leave_out_what_is_not_there(tmp_path):
    photometer = Photometer(u_dn_dc=0.0, u_flask=0.0, dn_dc_from="same stock", quantity="R_total")
    bench = Bench(osmometer=None, photometer=photometer, capillary=None, state_errors=False)
    path = lab_to_files(draw_lab(uniform(1e5), bench, np.random.default_rng(3)), tmp_path)
    document = tomllib.loads(path.read_text(encoding="utf-8"))
    assert set(document) == {"case", "sample", "effects", "light_scattering"}
    assert set(document["effects"]) == {"stock", "standard"}
    (measurement,) = document["light_scattering"]
    assert not {"u_reading", "u_concentration"} & set(measurement)
    assert measurement["dn_dc"]["from"] == "same stock"
    _, rows = read_table(tmp_path / "scattering.csv")
    assert np.sum(rows[:, 0] == 0.0) == 9


def test_rounded_as_an_instrument_shows_it(tmp_path):
    lab = draw_lab(uniform(1e5), Bench(), np.random.default_rng(3))
    lab_to_files(lab, tmp_path, rounded=True)
    for name, decimals in (("osmometry", 1), ("viscometry", 2)):
        _, rows = read_table(tmp_path / f"{name}.csv")
        np.testing.assert_array_equal(rows[:, -1], np.round(lab.tables[name].columns[-1], decimals))
    _, rows = read_table(tmp_path / "scattering.csv")
    np.testing.assert_allclose(rows[:, -1], lab.tables["light_scattering"].columns[-1], rtol=5e-4)


# --- the example --------------------------------------------------------------------------------


def test_example_is_what_its_script_makes(tmp_path):
    make_example.write_example(tmp_path)
    for path in sorted(tmp_path.iterdir()):
        assert (make_example.FOLDER / path.name).read_bytes() == path.read_bytes()


def number(text):
    return float(str(text).split(maxsplit=1)[0])


def test_example_states_the_bench_that_drew_it(tmp_path):
    path = lab_to_files(make_example.make_lab(), tmp_path)
    bench = tomllib.loads(path.read_text(encoding="utf-8"))
    example = tomllib.loads((make_example.FOLDER / "case.toml").read_text(encoding="utf-8"))
    assert example["sample"]["solids"] == bench["sample"]["solids"]
    assert example["effects"] == bench["effects"]
    same = ("u_reading", "u_concentration", "liquid_density", "wavelength", "refractive_index")
    for technique in ("osmometry", "light_scattering", "viscometry"):
        (stated,), (drawn,) = example[technique], bench[technique]
        assert stated["effects"] == drawn["effects"]
        for key in set(same) & set(drawn):
            assert number(stated[key]) == number(drawn[key]), key
    stated, drawn = (d["viscometry"][0]["mark_houwink"] for d in (example, bench))
    for key in ("K", "a", "u_K", "u_a", "calibration_dispersity"):
        assert number(stated[key]) == number(drawn[key]), key
    assert stated["calibrated_on"] == drawn["calibrated_on"]
    assert number(stated["M_ref"]) * 1000.0 == number(drawn["M_ref"])
    assert number(example["light_scattering"][0]["dn_dc"]["value"]) == 0.080


def test_example_is_an_ordinary_week():
    lab, sizes = make_example.make_lab(), error_sizes(make_example.BENCH)
    for name in ("stock", "solids", "dn_dc", "rayleigh_ratio", "K", "a"):
        assert abs(lab.errors[name][0]) < 1.3 * sizes[name][0]
    t = lab.tables["viscometry"].columns[-1]
    assert 1.2 < t[3] / 180.0 < t[-1] / 180.0 < 2.0
    assert 24.0 < lab.truth.radius_z < 30.0
