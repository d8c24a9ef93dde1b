"""Makes the table of src/physics/opacity/free_free_table.rs and the held-out values of its test.

Exact non-relativistic free-free Gaunt factors of hydrogen (Menzel & Pekeris 1935; Karzas & Latter
1961, ApJS 6, 167, eqs 17-23), averaged over a Maxwellian:
    g(gamma^2, u) = int_0^inf exp(-x) g_ff(E_final = x kT, h nu = u kT) dx.
Needs mpmath, numpy and scipy; takes some minutes.
    python3 make_free_free_gaunt.py table > src/physics/opacity/free_free_table.rs
    python3 make_free_free_gaunt.py checks
"""

import sys

import numpy as np
from mpmath import mp, mpf
from scipy.interpolate import CubicSpline

STEP = 0.25
GAMMA2 = np.arange(-2.25, 2.75 + 0.01, STEP)
PHOTON = np.arange(-4.25, 2.75 + 0.01, STEP)
# Final energies in Rydberg; below the first, g_ff is constant to 1e-3 of itself.
ENERGY = 10.0 ** np.arange(-4.5, 4.26, 0.125)


def elementary(energy, photon):
    """g_ff of one final energy and photon energy, both in Rydberg."""
    mp.dps = 25 + int(2.0 / np.sqrt(energy))
    eta_f = 1 / mp.sqrt(mpf(energy))
    eta_i = 1 / mp.sqrt(mpf(energy) + mpf(photon))
    difference, total = eta_f - eta_i, eta_f + eta_i
    argument = -4 * eta_i * eta_f / difference**2
    phase = mp.exp(1j * total * mp.log(difference / total))

    def integral(l):
        series = mp.hyp2f1(l + 1 - 1j * eta_f, l + 1 - 1j * eta_i, 2 * l + 2, argument)
        gammas = mp.re(mp.loggamma(l + 1 + 1j * eta_i)) + mp.re(mp.loggamma(l + 1 + 1j * eta_f))
        scale = (-argument) ** (l + 1) * mp.exp(mp.pi * difference / 2 + gammas)
        return scale / (4 * mp.factorial(2 * l + 1)) * (phase * series).real

    zero, one = integral(0), integral(1)
    cross = 2 * eta_i * eta_f * mp.sqrt(1 + eta_i**2) * mp.sqrt(1 + eta_f**2)
    bracket = (eta_i**2 + eta_f**2 + 2 * eta_i**2 * eta_f**2) * zero - cross * one
    return float(2 * mp.sqrt(3) / (mp.pi * eta_i * eta_f) * bracket * zero)


CURVES = {}


def curve(photon):
    """g_ff against the logarithm of the final energy, for one photon energy in Rydberg."""
    key = round(np.log10(photon), 6)
    if key not in CURVES:
        CURVES[key] = CubicSpline(np.log(ENERGY), [elementary(energy, photon) for energy in ENERGY])
    return CURVES[key]


def averaged(log_gamma2, log_photon):
    """The thermal average; trapezoids in ln x, whose error falls faster than any power."""
    gamma2 = 10.0**log_gamma2
    log_x = np.linspace(-22.0, 4.2, 1200)
    x = np.exp(log_x)
    log_energy = np.clip(log_x - np.log(gamma2), np.log(ENERGY[0]), np.log(ENERGY[-1]))
    weight = x * np.exp(-x)
    return float(np.sum(weight * curve(10.0**log_photon / gamma2)(log_energy)) / np.sum(weight))


def main():
    if sys.argv[1] == "checks":
        # Middles of cells, where interpolation is worst.
        for log_gamma2 in (-1.875, -0.875, -0.125, 0.375, 0.875, 1.375, 1.875):
            for log_photon in (-3.875, -2.125, -0.875, -0.125, 0.375, 0.875, 1.375, 2.125):
                print(f"    ({log_gamma2}, {log_photon}, {averaged(log_gamma2, log_photon):.6f}),", flush=True)
        return
    print("//! Thermally averaged free-free Gaunt factors of hydrogen, made by")
    print("//! `tests/data/make_free_free_gaunt.py`; see [`super::free_free`].")
    print()
    print("/// log10 of the first gamma^2 = Ry / kT, of the first u = h nu / kT, and the step of both.")
    print(f"pub const FIRST_LOG_GAMMA2: f64 = {GAMMA2[0]};")
    print("/// See [`FIRST_LOG_GAMMA2`].")
    print(f"pub const FIRST_LOG_PHOTON: f64 = {PHOTON[0]};")
    print("/// See [`FIRST_LOG_GAMMA2`].")
    print(f"pub const LOG_STEP: f64 = {STEP};")
    print()
    print("/// Rows: gamma^2; columns: u.")
    print("#[rustfmt::skip]")
    print(f"pub const GAUNT: [[f64; {len(PHOTON)}]; {len(GAMMA2)}] = [")
    for log_gamma2 in GAMMA2:
        row = [f"{averaged(log_gamma2, log_photon):.5f}" for log_photon in PHOTON]
        print("    [")
        for start in range(0, len(row), 10):
            print("        " + ", ".join(row[start : start + 10]) + ",")
        print("    ],", flush=True)
    print("];")


main()
