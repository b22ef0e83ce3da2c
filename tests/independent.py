"""Slow reference computation of viable bands, from the published formulas, one sample after another.

Nothing is taken from the package under test: constants, polynomial and rules are written down a second time, in plain
Python, so that a slip in either version shows as a difference.
"""

import math

# Garcia & Gordon 1992, Limnol. Oceanogr. 37:1307, eq. 8 with the erratum of 1993, Benson & Krause set, umol/kg.
A = (5.80871, 3.20291, 4.17887, 5.10006, -0.0986643, 3.80369)
B = (-7.01577e-3, -7.70028e-3, -1.13864e-2, -9.51519e-3)
C0 = -2.75915e-7


def solubility(temperature, salinity):
    """Oxygen at saturation [umol/kg]; the fit is on IPTS-68, the argument [degC] on ITS-90."""
    t68 = 1.00024 * temperature
    scaled = math.log((298.15 - t68) / (273.15 + t68))
    logarithm = sum(a * scaled**i for i, a in enumerate(A))
    logarithm += salinity * sum(b * scaled**i for i, b in enumerate(B)) + C0 * salinity**2
    return math.exp(logarithm)


def vapour_pressure(temperature, salinity):
    """Water vapour pressure [kPa], Weiss & Price 1980, Mar. Chem. 8:347, eq. 10."""
    kelvin = temperature + 273.15
    logarithm = 24.4543 - 67.4509 * 100 / kelvin - 4.8489 * math.log(kelvin / 100) - 0.000544 * salinity
    return 101.325 * math.exp(logarithm)


def po2(oxygen, temperature, salinity, pressure):
    """Oxygen partial pressure [kPa], SCOR WG 142, with the hydrostatic term of Enns et al. 1965."""
    at_saturation = 0.20946 * (101.325 - vapour_pressure(temperature, salinity))
    hydrostatic = math.exp(0.317 * pressure / (8.314 * (temperature + 273.15)))
    return at_saturation * oxygen / solubility(temperature, salinity) * hydrostatic


def pcrit(temperature, capacity, capacity_energy, rate, rate_energy, reference):
    """Critical oxygen partial pressure [kPa]: rate over supply capacity, each with its own activation energy [eV]."""
    x = (1 / (reference + 273.15) - 1 / (temperature + 273.15)) / 8.617333262e-5
    return rate * math.exp(rate_energy * x) / (capacity * math.exp(capacity_energy * x))


def samples_of(depths, margins):
    """Distinct depths downward, each with the mean of the margins found there, None where all are missing."""
    found = {}
    for depth, margin in zip(depths, margins, strict=True):
        if not math.isnan(depth):
            found.setdefault(depth, []).append(margin)
    levels = []
    for depth in sorted(found):
        present = [margin for margin in found[depth] if not math.isnan(margin)]
        levels.append((depth, sum(present) / len(present) if present else None))
    return levels


def ends_at_seabed(levels, deepest, seabed):
    """Whether the seabed lies in the cell of the deepest valid level, or at most 50 m below it."""
    depth = levels[deepest][0]
    upward = (depth - levels[deepest - 1][0]) / 2 if deepest > 0 else None
    downward = (levels[deepest + 1][0] - depth) / 2 if deepest + 1 < len(levels) else None
    upward, downward = (
        upward if upward is not None else downward or 0.0,
        downward if downward is not None else upward or 0.0,
    )
    return depth - upward <= seabed <= depth + max(downward, 50.0)


def bands(depths, margins, seabed=math.nan):
    """Viable bands of one column: a list of dicts with edges [m], their kinds, steepness [m/kPa] and joins."""
    levels = samples_of(depths, margins)
    valid = [i for i, (_, margin) in enumerate(levels) if margin is not None]
    if not valid:
        return []
    z, m = [levels[i][0] for i in valid], [levels[i][1] for i in valid]
    on_seabed = ends_at_seabed(levels, valid[-1], seabed)
    if on_seabed:
        z[-1] = min(z[-1], seabed)

    def is_joined(k):
        return 0 <= k < len(z) - 1 and (
            valid[k + 1] - valid[k] == 1 or levels[valid[k + 1]][0] - levels[valid[k]][0] <= 200
        )

    def skips(k):
        return is_joined(k) and valid[k + 1] - valid[k] > 1

    def crossing(k):
        slope = (m[k + 1] - m[k]) / (z[k + 1] - z[k])
        return z[k] - m[k] / slope, abs(1 / slope)

    found = []
    k = 0
    while k < len(z):
        if m[k] < 0:
            k += 1
            continue
        start = k
        while is_joined(k) and m[k + 1] >= 0:
            k += 1
        band = {"joins": sum(skips(j) for j in range(start - 1, k + 1))}
        if is_joined(start - 1):
            band["upper"], band["upper_steepness"] = crossing(start - 1)
            band["upper_kind"] = "crossing"
        elif start > 0:
            band |= {"upper": z[start], "upper_kind": "gap", "upper_steepness": math.nan}
        elif z[0] <= 10:
            band |= {"upper": 0.0, "upper_kind": "surface", "upper_steepness": 0.0}
        else:
            band |= {"upper": z[0], "upper_kind": "shallowest sample", "upper_steepness": math.nan}
        if is_joined(k):
            band["lower"], band["lower_steepness"] = crossing(k)
            band["lower_kind"] = "crossing"
        elif k < len(z) - 1:
            band |= {"lower": z[k], "lower_kind": "gap", "lower_steepness": math.nan}
        elif on_seabed:
            band |= {"lower": seabed, "lower_kind": "seabed", "lower_steepness": 0.0}
        else:
            band |= {"lower": z[k], "lower_kind": "deepest sample", "lower_steepness": math.nan}
        found.append(band)
        k += 1
    return found
