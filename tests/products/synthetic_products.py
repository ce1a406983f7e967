"""Synthetic curves and maps in the agreed layout: every status, hostile names, several grids."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import xarray as xr

from ensemble_horizon.vocabulary import STATUS_ATTRIBUTES, Status

LAW_ATTRIBUTES = {
    "long_name": "law of error growth",
    "flag_values": [0, 1, 2, 3],
    "flag_meanings": "exponential logistic logistic-source power",
}


@dataclass
class Result:
    curves: xr.Dataset
    maps: xr.Dataset | None = None


def make_curves(
    *,
    variable="wind_speed",
    long_name="10 m wind speed",
    units="m s-1",
    starts=("2031-01-05T00",),
    places=("North bank", "Skerry light", "Strait, inner [B]", "Outer shelf", "Quiet bay"),
    criteria=("gale/spread", "sat 0.7"),
    chance=False,
    pooled=False,
    lead_units="hours",
    last=240.0,
    seed=7,
):
    rng = np.random.default_rng(seed)
    lead = np.arange(0.0, last + 1, 6.0)
    kinds = ["tolerance", "saturation_fraction"][: len(criteria)]
    names = list(criteria)
    if chance:
        names.append('chance "over 17"')
        kinds.append("chance")
    time = np.array(starts, dtype="datetime64[ns]")
    labels = [str(np.datetime_as_string(value, unit="m")) for value in time]
    if pooled:
        time = np.append(time, np.datetime64("NaT", "ns"))
        labels.append("all")
    S, P, C, L = len(time), len(places), len(names), len(lead)
    rate = np.linspace(0.035, 0.012, P)[None, :] * (1 + 0.05 * rng.standard_normal((S, P)))
    first = np.full((S, P), 0.25)
    saturation = np.full((S, P), 4.8)
    grown = saturation[..., None] / (
        1 + (saturation / first - 1)[..., None] * np.exp(-rate[..., None] * lead)
    )
    noise = np.exp(0.03 * rng.standard_normal((S, P, L)))
    threshold = np.zeros((S, P, C))
    threshold[..., 0] = 2.5
    if len(criteria) > 1:
        threshold[..., 1] = 0.7 * saturation
    threshold_units = [units] * len(criteria)
    if chance:
        threshold[..., -1] = 0.3
        threshold_units.append("1")
    with np.errstate(divide="ignore", invalid="ignore"):
        level = np.where(threshold < 1, 1.9, threshold)
        time_to = (
            np.log(
                (level / first[..., None])
                * (saturation[..., None] - first[..., None])
                / (saturation[..., None] - level)
            )
            / rate[..., None]
        )
    beyond = time_to > last
    status = np.where(beyond, int(Status.beyond_run), int(Status.reached)).astype(np.int8)
    horizon = np.where(beyond, np.nan, time_to)
    high = np.where(beyond, np.inf, time_to * 1.16)
    high[high > last] = np.inf
    low = np.minimum(time_to * 0.87, last)
    projected = np.where(beyond, time_to, np.nan)
    last_places = {P - 1: Status.no_data, P - 2: Status.no_growth, P - 3: Status.at_start}
    if P >= 5:
        for place, code in last_places.items():
            status[:, place, 0] = code
            for values in (horizon, low, high, projected):
                values[:, place, 0] = np.nan
            if code == Status.at_start:
                horizon[:, place, 0] = 0.0
    shape3, shape4 = ("start", "place", "criterion"), ("start", "place", "lead")
    data = {
        "spread": (shape4, grown * noise, {"units": units}),
        "spread_low": (shape4, grown * 0.85),
        "spread_high": (shape4, grown * 1.18),
        "fitted": (shape4, grown),
        "growth_rate": (shape4[:2], rate),
        "growth_rate_low": (shape4[:2], rate * 0.9),
        "growth_rate_high": (shape4[:2], rate * 1.1),
        "doubling_time": (shape4[:2], np.log(2) / rate),
        "doubling_time_low": (shape4[:2], np.log(2) / rate / 1.1),
        "doubling_time_high": (shape4[:2], np.log(2) / rate / 0.9),
        "doubling_time_at_start": (shape4[:2], np.log(2) / rate * 1.05),
        "initial_error": (shape4[:2], first),
        "saturation": (shape4[:2], saturation),
        "law": (shape4[:2], np.ones((S, P), dtype=np.int8), LAW_ATTRIBUTES),
        "members": (shape4[:2], np.full((S, P), 20)),
        "threshold": (shape3, threshold),
        "horizon": (shape3, horizon),
        "low": (shape3, low),
        "high": (shape3, high),
        "projected": (shape3, projected),
        "status": (shape3, status, STATUS_ATTRIBUTES),
    }
    if chance:
        probability = np.full((S, P, C, L), np.nan)
        probability[:, :, -1] = np.clip(grown / 5.5, 0, 1)
        data["chance"] = (("start", "place", "criterion", "lead"), probability)
    return xr.Dataset(
        data,
        coords={
            "start": ("start", time),
            "start_label": ("start", labels),
            "place": ("place", list(places)),
            "place_kind": ("place", ["region"] + ["site"] * (P - 1)),
            "criterion": ("criterion", names),
            "criterion_kind": ("criterion", kinds),
            "threshold_units": ("criterion", threshold_units),
            "lead": ("lead", lead, {"units": lead_units}),
        },
        attrs={"variable": variable, "long_name": long_name, "units": units},
    )


def regular(latitude, longitude):
    """Coordinates of a plain grid."""
    latitude, longitude = np.asarray(latitude, float), np.asarray(longitude, float)
    coords = {
        "latitude": ("latitude", latitude, {"units": "degrees_north"}),
        "longitude": ("longitude", longitude, {"units": "degrees_east"}),
    }
    return ("latitude", "longitude"), coords, *np.meshgrid(latitude, longitude, indexing="ij")


def rotated(ny=60, nx=80, *, lat0=58.0, lon0=178.0, angle=25.0, step=0.25):
    """A grid turned about its centre on the sphere (tangent plane, unrolled by asin)."""
    x = (np.arange(nx) - (nx - 1) / 2) * np.deg2rad(step)
    y = (np.arange(ny) - (ny - 1) / 2) * np.deg2rad(step)
    X, Y = np.meshgrid(x, y)
    a = np.deg2rad(angle)
    U, V = X * np.cos(a) - Y * np.sin(a), X * np.sin(a) + Y * np.cos(a)
    r = np.hypot(U, V)
    c = np.arctan(r)
    p = np.deg2rad(lat0)
    with np.errstate(invalid="ignore"):
        lat = np.arcsin(np.cos(c) * np.sin(p) + np.where(r > 0, V * np.sin(c) / r, 0) * np.cos(p))
    lon = lon0 + np.rad2deg(
        np.arctan2(U * np.sin(c), r * np.cos(p) * np.cos(c) - V * np.sin(p) * np.sin(c))
    )
    lat, lon = np.rad2deg(lat), (lon + 180) % 360 - 180
    coords = {"latitude": (("y", "x"), lat), "longitude": (("y", "x"), lon)}
    return ("y", "x"), coords, lat, lon


def cells(count=12000, *, south=-90.0, north=90.0, west=-180.0, east=180.0, seed=3):
    """Scattered cells, even on the sphere (golden-angle spiral) and cut to a window."""
    k = np.arange(count) + 0.5
    lat = np.rad2deg(np.arcsin(1 - 2 * k / count))
    lon = (np.rad2deg(np.pi * (1 + 5**0.5) * k) + 180) % 360 - 180
    keep = (lat >= south) & (lat <= north) & (lon >= west) & (lon <= east)
    lat, lon = lat[keep], lon[keep]
    coords = {"latitude": ("cell", lat), "longitude": ("cell", lon)}
    return ("cell",), coords, lat, lon


def make_maps(
    grid,
    *,
    variable="wind_speed",
    long_name="10 m wind speed",
    units="m s-1",
    starts=("2031-01-05T00",),
    criteria=("gale/spread", "sat 0.7"),
    statuses=True,
    last=240.0,
    seed=5,
):
    dims, coords, lat, lon = grid
    rng = np.random.default_rng(seed)
    S, C = len(starts), len(criteria)
    phase = rng.uniform(0, 360, 4)
    wave = (
        np.sin(np.deg2rad(2 * lon + phase[0])) * np.cos(np.deg2rad(lat))
        + 0.6 * np.cos(np.deg2rad(5 * lon + phase[1]) + np.deg2rad(4 * lat))
        + 0.5 * np.sin(np.deg2rad(6 * lat + phase[2]))
    )
    base = 110 + 55 * wave + 3 * rng.standard_normal(lat.shape)
    horizon = np.stack(
        [np.stack([base * (1 + 0.25 * c) + 6 * s for c in range(C)]) for s in range(S)]
    )
    status = np.zeros(horizon.shape, dtype=np.int8)
    if statuses:
        status[horizon > last - 60] = Status.beyond_run
        status[horizon < 35] = Status.at_start
        status[..., (wave > -0.12) & (wave < 0.02) & (lat > np.median(lat))] = Status.no_growth
        corner = (lat < np.quantile(lat, 0.2)) & (np.sin(np.deg2rad(3 * lon)) > 0.6)
        status[..., corner] = Status.no_data
    numbers = np.where(status == Status.reached, horizon, np.nan).astype(np.float32)
    numbers[status == Status.at_start] = 3.0
    full = ("start", "criterion", *dims)
    plain = ("start", *dims)
    shape = (S, *lat.shape)
    return xr.Dataset(
        {
            "horizon": (full, numbers),
            "low": (full, numbers * np.float32(0.85)),
            "high": (full, np.where(numbers > 150, np.inf, numbers * 1.2).astype(np.float32)),
            "status": (full, status, STATUS_ATTRIBUTES),
            "threshold": (("criterion",), np.linspace(2.5, 3.4, C)),
            "growth_rate": (plain, np.full(shape, 0.02, dtype=np.float32)),
            "doubling_time": (plain, np.full(shape, 34.6, dtype=np.float32)),
            "initial_error": (plain, np.full(shape, 0.25, dtype=np.float32)),
            "saturation": (plain, np.full(shape, 4.8, dtype=np.float32)),
            "law": (plain, np.ones(shape, dtype=np.int8), LAW_ATTRIBUTES),
        },
        coords={
            "start": ("start", np.array(starts, dtype="datetime64[ns]")),
            "criterion": ("criterion", list(criteria)),
            "threshold_units": ("criterion", [units] * C),
            "lead": ("lead", np.arange(0.0, last + 1, 6.0), {"units": "hours"}),
            **coords,
        },
        attrs={"variable": variable, "long_name": long_name, "units": units, "members": 20},
    )


GRIDS = {
    "global": lambda: regular(np.arange(90, -90.1, -1.5), np.arange(0, 360, 1.5)),
    "regional": lambda: regular(np.arange(46, 63, 0.25), np.arange(-12, 12, 0.25)),
    "date-line": lambda: regular(
        np.arange(-26, -4, 0.4), (np.arange(166, 196, 0.4) + 180) % 360 - 180
    ),
    "rotated": rotated,
    "cells": lambda: cells(),
    "tiny": lambda: regular(np.linspace(50, 54, 5), np.linspace(2, 8, 7)),
}
