#!/usr/bin/env python3
"""Writes 14_water_dense.csv and 14_air_dense.csv beside this file: the figures that the fluid laws are held against.

Needs CoolProp (PyPI; version 8.0.0 wrote the committed files). Run again only to check or extend them:
    python3 make_fluids.py
Water: HEOS::Water, that is IAPWS-95 for density and saturation pressure, IAPWS R12-08 for viscosity.
Moist air: HAPropsSI, that is ASHRAE RP-1485 for density, its mixing rule for viscosity.
"""

import csv
import pathlib

import CoolProp
from CoolProp.CoolProp import HAPropsSI, PropsSI

FOLDER = pathlib.Path(__file__).parent
KELVIN = 273.15


def write(name, what, header, rows):
    with open(FOLDER / name, "w", newline="") as file:
        file.write(f"# {what}, CoolProp {CoolProp.__version__}; written by make_fluids.py\n")
        writer = csv.writer(file, lineterminator="\n")
        writer.writerow(header)
        writer.writerows(rows)


def water():
    for step in range(73):
        celsius = max(2.5 * step, 0.01)  # the liquid begins at the triple point, 273.16 K
        kelvin = celsius + KELVIN
        saturation = PropsSI("P", "T", kelvin, "Q", 0, "Water")
        for pressure in (max(101_325.0, 1.0001 * saturation), max(1e6, 1.0001 * saturation), 5e6, 10e6):
            density, viscosity = (PropsSI(what, "T", kelvin, "P", pressure, "Water") for what in "DV")
            yield [celsius, f"{pressure:.9g}", f"{density:.9g}", f"{viscosity:.8g}", f"{saturation:.9g}"]


def air():
    for step in range(23):
        celsius = -20.0 + 5.0 * step
        kelvin = celsius + KELVIN
        for pressure in (50e3, 65e3, 80e3, 95e3, 101_325.0, 110e3, 130e3):
            for humidity in (0.0, 0.25, 0.5, 0.75, 1.0):
                # Below the triple point HAPropsSI counts relative humidity over ice, the core over water.
                if celsius > 0 and humidity * PropsSI("P", "T", kelvin, "Q", 0, "Water") > 0.4 * pressure:
                    continue
                volume = HAPropsSI("Vha", "T", kelvin, "P", pressure, "R", humidity)
                viscosity = HAPropsSI("M", "T", kelvin, "P", pressure, "R", humidity)
                yield [celsius, f"{pressure:.9g}", humidity, f"{1 / volume:.8g}", f"{viscosity:.7g}"]


write(
    "14_water_dense.csv",
    "Liquid water, IAPWS-95 and IAPWS R12-08",
    ["t[degC]", "p[Pa abs]", "rho[kg/m3]", "mu[Pa s]", "p_sat[Pa abs]"],
    water(),
)
write(
    "14_air_dense.csv",
    "Moist air, ASHRAE RP-1485",
    ["t[degC]", "p[Pa abs]", "RH[-]", "rho[kg/m3]", "mu[Pa s]"],
    air(),
)
