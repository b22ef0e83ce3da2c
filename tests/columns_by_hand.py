"""Small column totals written by hand, and the findings that they give."""

import numpy as np
import xarray as xr

from habitat.findings import findings_table, regional_values

NAN = np.nan


def totals_of(upper, lower, thickness, dims, activities=(1.0,), **coords):
    """Totals with a leading dimension activity; the other dimensions as named."""
    arrays = {"upper": upper, "lower": lower, "thickness": thickness}
    data = {name: (("activity", *dims), np.asarray(values, dtype=float)[None]) for name, values in arrays.items()}
    return xr.Dataset(data, coords={"activity": list(activities), **coords})


def casts(latitude=(0.0, 0.0, 0.0, 0.0), longitude=(10.0, 11.0, 12.0, 13.0)):
    names = [f"c{i}" for i in range(len(latitude))]
    return xr.Dataset(
        coords={"cast": names, "latitude": ("cast", list(latitude)), "longitude": ("cast", list(longitude))},
        attrs={"form": "casts"},
    )


def grid(latitude, longitude):
    return xr.Dataset(coords={"latitude": latitude, "longitude": longitude}, attrs={"form": "grid"})


def four_casts():
    """One with 100 m, one with two bands of together 60 m, one without viable water, one without data."""
    return totals_of([0, 10, NAN, NAN], [100, 210, NAN, NAN], [100, 60, 0, NAN], ["cast"])


def regional_findings(columns, totals, drawn, regions, species):
    """Findings of one animal from the totals of each ocean."""

    def brought_down(each):
        return {scenario: regional_values(columns, given, regions) for scenario, given in each.items()}

    return findings_table(brought_down(totals), drawn and brought_down(drawn), species)
