"""Results from their JSON: what a server worked out, as the library's own objects."""

from collections.abc import Mapping
from typing import Any

import numpy as np

from pinlight.arrays.files import Mode
from pinlight.arrays.geometry import Baseline
from pinlight.errors import PinlightError, ServiceError
from pinlight.planning.night import Block, Look, NightPlan
from pinlight.ranking.result import Calibrator, CalibratorSet, Ranking
from pinlight.ranking.setup import Setup, Thresholds
from pinlight.ranking.target import Target
from pinlight.sky.time import parse_utc
from pinlight.version import __version__

__all__ = ["plan_from_json", "ranking_from_json"]

Json = Mapping[str, Any]


def ranking_from_json(answer: Json) -> Ranking:
    """The ranking of which `answer` is the JSON; keys that this version does not know are passed over.

    Raises
    ------
    ServiceError
        If a key that it needs is missing or of another kind; the message names both versions.
    """
    try:
        return _ranking(answer)
    except (PinlightError, KeyError, TypeError, ValueError, AttributeError) as error:
        raise _unreadable(answer, error) from error


def plan_from_json(answer: Json) -> NightPlan:
    """The night plan of which `answer` is the JSON; as `ranking_from_json`."""
    try:
        return NightPlan(
            edition=answer["edition"],
            setup=_setup(answer["setup"], None),
            span=_window(answer["span_utc"]),
            blocks=tuple(_block(block) for block in answer["blocks"]),
            unscheduled=tuple((one["target"], one["reason"]) for one in answer["unscheduled"]),
            objective=answer["objective"],
            bound=answer["bound"],
            notes=tuple(answer["notes"]),
            pinlight=answer["pinlight"],
        )
    except (PinlightError, KeyError, TypeError, ValueError, AttributeError) as error:
        raise _unreadable(answer, error) from error


def _unreadable(answer: Json, error: Exception) -> ServiceError:
    version = answer.get("pinlight", "an unknown version")
    what = f"{error.args[0]!r} is missing" if isinstance(error, KeyError) else str(error).splitlines()[0]
    return ServiceError(f"the server runs Pinlight {version}, whose answer {__version__} cannot read: {what}")


def _ranking(answer: Json) -> Ranking:
    parameters, counts = answer["parameters"], answer["counts"]
    limits = Thresholds(
        parameters["separation_max_deg"], parameters["v2_min"], parameters["magnitude_max"], None
    )
    target = answer["target"]
    sets = [_set(one) for one in answer["best_sets"]]
    named = None if answer["named_set"] is None else _set(answer["named_set"])
    names = {
        star_id: name
        for one in (*answer["best_sets"], *([answer["named_set"]] if named else []))
        for star_id, name in zip(one["star_ids"], one["names"], strict=True)
    }
    reach, span = answer["target_window_utc"], answer["span_utc"]
    return Ranking(
        edition=answer["edition"],
        pinlight=answer["pinlight"],
        target=Target(
            target["ra_deg"],
            target["dec_deg"],
            name=target["name"],
            magnitudes=dict(target["magnitudes"]),
            diameter_mas=target["diameter_mas"],
            star_id=target["star_id"],
            diameter_error_mas=target["diameter_error_mas"],
        ),
        setup=_setup(answer["setup"], limits),
        limits=limits,
        judge=parameters["judge"],
        best=parameters["best"],
        calibrators=tuple(_calibrator(star) for star in answer["calibrators"]),
        stars=counts["stars"],
        ranked=counts["ranked"],
        excluded=dict(answer["excluded"]),
        best_sets=tuple(sets),
        named_set=named,
        span=None if span is None else _window(span),
        target_windows=None if reach is None else tuple(map(_window, reach)),
        coarse_paths_m=answer["coarse_paths_m"],
        names=names,
        left_out={},
        notes=tuple(answer["notes"]),
    )


def _setup(setup: Json, limits: Thresholds | None) -> Setup:
    """What of the setup stands in the JSON; its mode has no camera, its array no drift."""
    mode = None
    if setup["mode"] is not None:
        keys = ("band", "wavelength_um", "bandwidth_um", "channels", "field_arcsec")
        mode = Mode.model_construct(name=setup["mode"], **{key: setup[key] for key in keys})
    return Setup(
        array_name=setup["array"],
        stations=tuple(setup["stations"]),
        baselines=tuple(
            Baseline((one["stations"][0], one["stations"][1]), one["length_m"]) for one in setup["baselines"]
        ),
        mode=mode,
        drift=None,
        band=setup["band"],
        wavelength_um=setup["wavelength_um"],
        nodes_um=np.array([[setup["wavelength_um"]]]),
        weights=np.array([1.0]),
        field_arcsec=setup["field_arcsec"],
        look_interval_min=setup["look_interval_min"],
        limits=limits or Thresholds(180.0, 0.0, None, None),
    )


def _calibrator(star: Json) -> Calibrator:
    diameter, visibility = star["diameter"], star["visibility"]
    windows = star["window_utc"]
    return Calibrator(
        rank=star["rank"],
        star_id=star["star_id"],
        name=star["name"],
        ra_deg=star["ra_deg"],
        dec_deg=star["dec_deg"],
        separation_deg=star["separation_deg"],
        spectral_type=star["spectral_type"],
        magnitudes={band: (one["value"], one["error"]) for band, one in star["magnitudes"].items()},
        limb_darkened_mas=diameter["limb_darkened_mas"],
        uniform_disk_mas=diameter["uniform_disk_mas"],
        own_error_mas=diameter["own_error_mas"],
        shared_error_mas=diameter["shared_error_mas"],
        relations=tuple(diameter["relations"]),
        flags=tuple(star["flags"]),
        v2_min=visibility["v2_min"],
        v2_max=visibility["v2_max"],
        longest_baseline_m=visibility["longest_baseline_m"],
        budget={name: None if term is None else term / 100 for name, term in star["budget_percent"].items()},
        calibration_error=_relative(star["calibration_error_percent"]),
        standing=star["standing"],
        windows=None if windows is None else tuple(map(_window, windows)),
        coarse_paths_m=star["coarse_paths_m"],
    )


def _set(one: Json) -> CalibratorSet:
    windows = one["window_utc"]
    return CalibratorSet(
        tuple(one["star_ids"]),
        _relative(one["calibration_error_percent"]),
        None if windows is None else tuple(map(_window, windows)),
        one["coarse_paths_m"],
    )


def _block(block: Json) -> Block:
    looks = [Look(look["role"], look["name"], look["star_id"], *_window(look)) for look in block["looks"]]
    return Block(
        target=block["target"],
        coarse_paths_m=dict(block["coarse_paths_m"]),
        calibration_error=_relative(block["calibration_error_percent"]),
        looks=tuple(looks),
        **dict(zip(("start", "end"), _window(block), strict=True)),
    )


def _relative(percent: float | None) -> float:
    return float("inf") if percent is None else percent / 100


def _window(window: Json) -> tuple[float, float]:
    return parse_utc(window["start_utc"]), parse_utc(window["end_utc"])
