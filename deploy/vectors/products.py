#!/usr/bin/env python3
"""Writes testdata/vectors/cantera.csv: products of lean combustion and their flow
through a convergent nozzle, by an independent library and an older data set.

    pip install cantera==3.2.0
    python3 deploy/vectors/products.py > testdata/vectors/cantera.csv

Combustion by chemical equilibrium among N2 O2 Ar CO2 H2O, which leaves nothing else for
lean kerosene to become; then frozen. The sonic state by halving the pressure along an
isentrope. Nothing here is shared with the program but the composition of dry air.
"""

import math

import cantera as ct

NAMES = ["N2", "O2", "Ar", "CO2", "H2O", "Jet-A(g)"]
AIR = {"N2": 0.78084, "O2": 0.209476, "Ar": 0.009365, "CO2": 0.000319}  # Gordon 1982
BACK = 101325.0


def products(species, f, war):
    """The gas of 1 kg dry air with f kg fuel, burnt, and war kg water."""
    gas = ct.Solution(thermo="ideal-gas", species=[species[n] for n in NAMES])
    gas.X = AIR
    kg = {n: gas[n].Y[0] for n in AIR}
    kg["Jet-A(g)"], kg["H2O"] = f, war
    gas.TPY = 600.0, BACK, kg
    if f > 0:
        gas.equilibrate("TP", rtol=1e-12)
    frozen = ct.Solution(thermo="ideal-gas", species=[species[n] for n in NAMES[:5]])
    frozen.TPX = 600.0, BACK, {n: gas[n].X[0] for n in NAMES[:5]}
    return frozen


def state(gas, s0, h0, p):
    gas.SP = s0, p
    v = math.sqrt(max(0.0, 2 * (h0 - gas.enthalpy_mass)))
    a = math.sqrt(gas.cp / gas.cv * ct.gas_constant / gas.mean_molecular_weight * gas.T)
    return v, a, gas.T, gas.density


def main():
    species = {s.name: s for s in ct.Species.list_from_file("nasa_gas.yaml")}
    print(f"# Cantera {ct.__version__} with its file nasa_gas.yaml (McBride, Gordon, Reno, NASA TM-4513, 1993, 7-coefficient fits); written by deploy/vectors/products.py.")
    print("# Kerosene products in humid air by equilibrium among N2 O2 Ar CO2 H2O, f and war per kg of dry air; then frozen. c_star = W sqrt(R T0)/(A p0); npr_* columns: convergent nozzle at NPR 1.5.")
    print("f,war,T0_K,M_g_mol,cp_J_kgK,gamma,h_minus_h300_J_kg,s_minus_s300_J_kgK,Tstar_T0,pstar_p0,c_star,npr_mach,npr_T_T0,npr_V_m_s,npr_flow")
    for f, war in [(0, 0), (0, 0.015), (0.01, 0), (0.02, 0), (0.02, 0.01), (0.03, 0.005)]:
        gas = products(species, f, war)
        for t0 in (300, 500, 700, 900, 1100, 1300):
            r = ct.gas_constant / gas.mean_molecular_weight
            gas.TP = 300.0, BACK
            h300, s300 = gas.enthalpy_mass, gas.entropy_mass
            p0 = 1.5 * BACK
            gas.TP = t0, BACK
            ds = gas.entropy_mass - s300
            gas.TP = t0, p0
            h0, s0, cp, gamma = gas.enthalpy_mass, gas.entropy_mass, gas.cp_mass, gas.cp / gas.cv
            low, high = 0.4 * p0, 0.7 * p0
            for _ in range(60):
                mid = (low + high) / 2
                v, a, _, _ = state(gas, s0, h0, mid)
                low, high = (mid, high) if v > a else (low, mid)
            v, a, t, rho = state(gas, s0, h0, (low + high) / 2)
            scale = math.sqrt(r * t0) / p0
            row = [f, war, t0, gas.mean_molecular_weight, cp, gamma, h0 - h300, ds, t / t0, (low + high) / 2 / p0, rho * v * scale]
            v, a, t, rho = state(gas, s0, h0, BACK)
            row += [v / a, t / t0, v, rho * v * scale]
            print(",".join(f"{x:.9g}" for x in row))


if __name__ == "__main__":
    main()
