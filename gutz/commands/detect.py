"""`gutz detect`: how many shots, and up to what temperature and entropy.

In:  a scan file with [imaging], a value for each axis that is neither temperature nor camera.
Out: a table along temperature (or along one axis of the camera) or JSON; with --out datasets and a figure; with
     --shots-out synthetic pictures; with --improve better settings and sensitivities.
"""

import dataclasses
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr

from gutz import console, plots
from gutz.commands.points import load, values
from gutz.errors import InputError, OutputError
from gutz.imaging import design, telling
from gutz.imaging import detect as detecting
from gutz.imaging import shots as synthetic
from gutz.imaging.detect import Limit
from gutz.imaging.sample import CHANNELS, WHERE
from gutz.phases import WORDS, Phase
from gutz.plots import detect as figure
from gutz.scan import detection, export, paths
from gutz.scan.chunk import mixture_of
from gutz.scan.detection import Row
from gutz.scan.plan import Axis, Plan, check_names
from gutz.solver import solve
from gutz.status import UNTRUSTED, describe
from gutz.temperature import CriticalTemperature, critical_temperature
from gutz.units import BOLTZMANN

NAME = "detect"
TEMPERATURES = 20
"""Points of a curve where the file gives no temperatures."""
_COLDEST, _HOTTEST = 0.05, 1.2
_MEAN_FIELD = "temperatures are those of mean field and too high by about the ratio of the two critical temperatures"


def run(
    file: Path, overrides: Sequence[str], at: Sequence[str], improve: str | None, tell: bool,
    shots_out: str | None, seed: int, pictures: int, side: int,
    out: str | None, as_json: bool, quiet: bool, force: bool, debug: bool,
) -> int:  # fmt: skip
    """Compute, print, draw; exit code 1 if some number is not to be trusted."""
    source, plan = load(file, overrides, clouds=True)
    made = detection.section(plan)
    chosen, free = _axes(plan, values(at))
    if improve is not None:
        return _improve(plan, chosen, improve, as_json)
    if tell:
        return _tell(plan, chosen, as_json)
    folder = _folder(out, force) if out else None
    critical = {channel: _critical(plan, chosen, channel) for channel in CHANNELS}
    T = _temperatures(plan, values(at), chosen, critical)
    row = detection.row(plan, chosen, T)
    curves = [_curve(plan, {**chosen, **_value(free, i)}, row) for i in range(free.values.size if free else 1)]
    dataset = _dataset(plan, row, curves, free, critical, made.shots, made.significance)
    if as_json:
        console.write_json(_record(dataset))
    else:
        _print(plan, dataset, row, free, quiet)
    if folder is not None:
        _save(folder, dataset, plan, source.name, quiet or as_json)
    if shots_out is not None:
        _pictures(plan, chosen, row, dataset, shots_out, pictures, side, seed, force, quiet or as_json)
    return 1 if np.any(row.status & int(UNTRUSTED)) else 0


def _axes(plan: Plan, at: dict[str, float]) -> tuple[dict[str, float], Axis | None]:
    """A value for every axis, and the one axis of the camera that is free. Raises InputError for missing values."""
    check_names(plan, at)
    camera = [axis for axis in detection.imaging_axes(plan) if axis.name not in at]
    if len(camera) > 1:
        raise InputError(f"one axis of the camera may be free; give the others a value: --at {camera[1].name}=..")
    missing = [
        axis for axis in plan.axes
        if axis.name not in at and axis.target.path not in detection.WARM and axis not in camera
    ]  # fmt: skip
    if missing:
        example = " ".join(f"--at {axis.name}={axis.values[axis.values.size // 2]:g}" for axis in missing)
        raise InputError(f"a curve against temperature needs a value for every other axis: add {example}")
    return {axis.name: at.get(axis.name, float(axis.values[0])) for axis in plan.axes}, camera[0] if camera else None


def _value(axis: Axis | None, i: int) -> dict[str, float]:
    return {} if axis is None else {axis.name: float(axis.values[i])}


def _critical(plan: Plan, chosen: dict[str, float], channel: str) -> CriticalTemperature | None:
    """Best estimate of the critical temperature; None where the exchange between sites does not apply."""
    cool = detection.plan_without_warmth(plan)
    settings = cool.settings_at([np.array([chosen[axis.name]]) for axis in cool.axes])
    if plan.spec.trap is not None:
        # In a trap order sits where sites hold one atom (counterflow), or half a pair (the densest order).
        settings |= {"mu": None, "filling": (0.5, 0.5)}
    found = critical_temperature(mixture_of({**settings, "T": 0.0, "entropy": None}), channel)  # type: ignore[arg-type]
    return found if float(np.ravel(found.T_c)[0]) > 0 else None


_ANYWHERE = {"mu": 0.0, "filling": None, "T": 0.0, "entropy": None}


def _temperatures(
    plan: Plan, at: dict[str, float], chosen: dict[str, float], critical: dict[str, CriticalTemperature | None]
) -> np.ndarray:
    """The file's axis of temperature, or a row that reaches beyond the mean-field critical temperature."""
    warm = [axis for axis in plan.axes if axis.target.path == "mixture.T" and axis.name not in at]
    if warm:
        settings = plan.settings_at(
            [axis.values if axis is warm[0] else np.full(warm[0].values.size, axis.values[0]) for axis in plan.axes]
        )
        return np.sort(np.asarray(settings["T"], float))
    bare = max((float(np.ravel(found.T_c_bare)[0]) for found in critical.values() if found is not None), default=0.0)
    if bare == 0:
        # Without an estimate, the scale of the exchange: z t_1 t_2/|U12|.
        cool = detection.plan_without_warmth(plan)
        mixture = mixture_of(cool.settings_at([np.array([chosen[axis.name]]) for axis in cool.axes]) | _ANYWHERE)
        strength = float(np.abs(np.ravel(mixture.U12)[0]))
        bare = float(2.0 * np.prod(np.asarray(mixture.t).reshape(2, -1), axis=0).sum() / max(strength, 1e-300))
        if strength == 0 or bare == 0:
            raise InputError(
                "nothing exchanges here, so no temperatures follow; add an axis over mixture.T to the file"
            )
    return np.linspace(_COLDEST, _HOTTEST, TEMPERATURES) * bare


def _curve(plan: Plan, chosen: dict[str, float], row: Row) -> dict[str, Any]:
    return detecting.measure(
        detection.camera(plan, chosen), row.samples, float(detection.given(plan, "significance", chosen))
    )


def _dataset(
    plan: Plan, row: Row, curves: list[dict[str, Any]], free: Axis | None,
    critical: dict[str, CriticalTemperature | None], allowed: float, significance: float,
) -> xr.Dataset:  # fmt: skip
    """Everything along temperature, and the limits read off it; one more dim where an axis of the camera is free."""
    unit = plan.energy_unit
    lead = (free.name,) if free else ()
    coords: dict[str, Any] = {
        "T": ("T", row.T, {"units": unit, "long_name": "Temperature"}),
        "channel": list(CHANNELS),
        "species": [1, 2],
    }
    if free:
        coords[free.name] = (free.name, free.values, {"units": free.unit, "long_name": free.words})
    data: dict[str, Any] = {}
    for name in curves[0]:
        inner = ("T", "species") if name == "condensate" else ("T", "channel")
        whole = np.stack([curve[name] for curve in curves]) if free else curves[0][name]
        data[name] = ((*lead, *inner), whole, {"units": "1", "long_name": detecting.words(name)})
    data["entropy_per_particle"] = ("T", row.entropy, {"units": "k_B", "long_name": "Entropy per particle"})
    data["phase"] = ("T", row.phase.astype(np.int8), {"units": "1", "long_name": "Phase, -1 for a cloud"})
    data["status"] = ("T", row.status.astype(np.int32), {"units": "1", "long_name": "Status"})
    recoil = _nanokelvin(plan)
    if np.isfinite(recoil):
        data["T_nK"] = ("T", row.T * recoil, {"units": "nK", "long_name": "Temperature"})
    for name in ("T_c", "T_c_bare", "entropy_per_particle"):
        column = [np.nan if c is None else float(np.ravel(getattr(c, name))[0]) for c in critical.values()]
        label = f"critical_{'entropy' if name.startswith('entropy') else name}"
        words = {"units": "k_B" if label.endswith("entropy") else unit, "long_name": label.replace("_", " ")}
        data[label] = ("channel", np.array(column), words)
    dataset = xr.Dataset(data, coords=coords)
    limits = _limits(dataset, plan, free, allowed, critical)
    for name, (values_, units) in limits.items():
        dataset[name] = ((*lead, "channel"), values_, {"units": units or unit, "long_name": name.replace("_", " ")})
    return dataset.assign_attrs(
        title=plan.spec.output.title, energy_unit=unit, shots_allowed=allowed, significance=significance,
        ansatz=plan.spec.ansatz.kind, sample="cloud" if plan.spec.trap else "box", nanokelvin_per_unit=recoil,
    )  # fmt: skip


def _nanokelvin(plan: Plan) -> float:
    """nK per energy unit; nan without a lattice."""
    found = plan.light([axis.values[:1] for axis in plan.axes])
    return float("nan") if found is None else float(found.recoil[0]) / BOLTZMANN * 1e9


def _limits(
    dataset: xr.Dataset, plan: Plan, free: Axis | None, allowed: float, critical: dict[str, Any]
) -> dict[str, tuple[np.ndarray, str]]:
    """T_det and what belongs to it for every channel (and value of the free axis)."""
    found: list[list[Limit]] = []
    swept = free.target.path == "imaging.shots" if free else False
    for i in range(free.values.size if free else 1):
        one = dataset.isel({free.name: i}) if free else dataset
        shots = float(free.values[i]) if free and swept else allowed
        line = []
        for k, channel in enumerate(CHANNELS):
            c = critical[channel]
            T_c = None if c is None else float(np.ravel(c.T_c)[0])
            line.append(
                detecting.limit(
                    one["T"].values, one["entropy_per_particle"].values, one["shots"].values[:, k], shots, T_c
                )
            )
        found.append(line)
    names = {"T_det_mean_field": "T", "T_det": "best", "entropy_det": "entropy", "order_ends": "order_T"}
    out = {}
    for name, attribute in names.items():
        table = np.array([[getattr(one, attribute) for one in line] for line in found])
        out[name] = (table if free else table[0], "k_B" if name.startswith("entropy") else "")
    return out


def _print(plan: Plan, dataset: xr.Dataset, row: Row, free: Axis | None, quiet: bool) -> None:
    ordered = [c for c in CHANNELS if np.isfinite(dataset["shots"].sel(channel=c).values).any()]
    for channel in ordered:
        if free is None:
            _table(dataset, row, channel)
        else:
            _table_along(dataset, free, channel)
        _say_limits(dataset, channel, free)
    if not ordered:
        phases = sorted({WORDS[Phase(int(p))] for p in row.phase if p >= 0})
        console.say(
            "no pair or counterflow order at any of these temperatures" + (f": {', '.join(phases)}" if phases else "")
        )
        if plan.spec.ansatz.kind == "product":
            console.note('note: the product ansatz cannot see these orders; use ansatz.kind = "dressed"', quiet=False)
    for note in row.notes:
        console.note(f"note: {note}", quiet)
    code = int(np.bitwise_or.reduce(row.status))
    for sentence in describe(code):
        console.note(f"note: at some temperature, {sentence}", quiet=False)


def _table(dataset: xr.Dataset, row: Row, channel: str) -> None:
    kelvin = "T_nK" in dataset
    unit = "nK" if kelvin else str(dataset.attrs["energy_unit"])
    one = dataset.sel(channel=channel)
    number = console.number
    rows = []
    for i in range(one.sizes["T"]):
        here = one.isel(T=i)
        T = float(here["T_nK" if kelvin else "T"])
        seen = np.isfinite(float(here["shots"]))
        phase = WORDS[Phase(int(here["phase"]))] if int(here["phase"]) >= 0 else f"{float(here['peak_height']):.3f}"
        rows.append(
            (
                number(T, 4), number(float(here["entropy_per_particle"]), 3), phase,
                f"{float(here['amplitude']):.2e}" if seen else "-", number(float(here["snr"]), 3) if seen else "-",
                number(float(np.ceil(float(here["shots"])))) if seen else "-",
                number(float(here["order_ratio"]), 3) if seen else "-",
            )
        )  # fmt: skip
    head = f"T ({unit})" if unit not in ("", "1") else "T"
    state = "phase" if row.phase.max() >= 0 else "order²/n²"
    console.table((head, "S/N (k_B)", state, "A", "S/N of a shot", "shots", "A12/Aaa"), rows)


def _table_along(dataset: xr.Dataset, free: Axis, channel: str) -> None:
    one = dataset.sel(channel=channel)
    scale = _scale(dataset)
    number = console.number
    rows = []
    for i, value in enumerate(free.values):
        here = one.isel({free.name: i})
        coldest = float(here["shots"].values[0])
        rows.append(
            (
                number(float(value)), number(float(np.ceil(coldest))) if np.isfinite(coldest) else "-",
                number(float(here["T_det"]) * scale[0], 3), number(float(here["entropy_det"]), 3),
            )
        )  # fmt: skip
    heading = f"{free.name} ({free.unit})" if free.unit != "1" else free.name
    console.table((heading, "shots, coldest", f"T_det ({scale[1]})", "S/N there (k_B)"), rows)


def _scale(dataset: xr.Dataset) -> tuple[float, str]:
    """Factor and unit in which people read temperatures."""
    factor = float(dataset.attrs["nanokelvin_per_unit"])
    return (factor, "nK") if np.isfinite(factor) else (1.0, str(dataset.attrs["energy_unit"]))


def _say_limits(dataset: xr.Dataset, channel: str, free: Axis | None) -> None:
    factor, unit = _scale(dataset)
    one = dataset.sel(channel=channel)
    number = console.number
    name = {"pair": "pair peak", "antipair": "counterflow peak"}[channel]
    T_c, bare = (float(one[key]) * factor for key in ("critical_T_c", "critical_T_c_bare"))
    console.say(f"{name} at {WHERE[channel]}; {dataset.attrs['significance']:g} standard deviations")
    if np.isfinite(T_c):
        console.say(
            f"critical temperature: {number(T_c, 3)} {unit} best estimate, {number(bare, 3)} {unit} mean field, "
            f"S/N = {number(float(one['critical_entropy']), 3)} k_B at the best estimate"
        )
    if free is not None:
        return
    seen = float(one["T_det_mean_field"]) * factor
    allowed = dataset.attrs["shots_allowed"]
    if not np.isfinite(seen):
        console.say(f"not seen with {allowed:g} shots even at the lowest temperature")
        return
    console.say(
        f"seen with {allowed:g} shots up to T_det = {number(float(one['T_det']) * factor, 3)} {unit} to plan with "
        f"({number(seen, 3)} {unit} in mean field), S/N = {number(float(one['entropy_det']), 3)} k_B"
    )
    if np.isfinite(T_c):
        console.note(f"note: the table's {_MEAN_FIELD}", quiet=False)


def _record(dataset: xr.Dataset) -> dict[str, Any]:
    return {
        "attributes": dict(dataset.attrs),
        **{str(name): dataset[name].values.tolist() for name in dataset.coords},
        **{str(name): {"dims": list(dataset[name].dims), "values": dataset[name].values} for name in dataset.data_vars},
    }


def _improve(plan: Plan, chosen: dict[str, float], text: str, as_json: bool) -> int:
    """Move knobs, print what became of them, what holds them, and what calibration errors do."""
    knobs, extended = detection.knobs(plan, text, chosen)
    gas = [knob for knob in knobs if not knob.camera]
    samples = detection.samples_of(extended, len(gas))
    camera = detection.camera(plan, chosen)
    significance = float(detection.given(plan, "significance", chosen))
    start = samples(np.array([[knob.start for knob in gas]]))[0]
    totals = [float(start.regions[channel].total) for channel in CHANNELS]
    channel = CHANNELS[int(np.argmax(totals))]
    better = design.improve(knobs, samples, camera, channel, significance)
    moved = camera.with_(**{k.camera: float(v) * k.si for k, v in zip(knobs, better.values, strict=True) if k.camera})
    settled = detection.moved(extended, [v for k, v in zip(knobs, better.values, strict=True) if not k.camera])
    draw, centre, errors = detection.calibrated(settled)
    spread = design.spread(draw, centre, errors, moved, channel, significance) if errors.size else None
    if as_json:
        console.write_json(
            {
                "channel": channel, "shots_before": better.before, "shots_after": better.after,
                "knobs": [
                    {
                        "name": k.name, "unit": k.unit, "low": k.low, "high": k.high, "start": k.start, "value": v,
                        "bound": b,
                    }
                    for k, v, b in zip(knobs, better.values, better.bounds, strict=True)
                ],
                "sensitivities": [one._asdict() for one in better.sensitivities],
                "calibration": None if spread is None else dataclasses.asdict(spread),
            }
        )  # fmt: skip
    else:
        _print_improved(better, channel, spread)
    return 0


def _tell(plan: Plan, chosen: dict[str, float], as_json: bool) -> int:
    """Print what the candidate phases at the point would show, and which peak tells them apart."""
    if plan.spec.trap is not None:
        raise InputError("--tell: compares phases of a uniform sample; leave [trap] out and give mu or filling")
    mixture = mixture_of(plan.settings_at([np.array([chosen[axis.name]]) for axis in plan.axes]))
    camera = detection.camera(plan, chosen)
    significance = float(detection.given(plan, "significance", chosen))
    found = [solve(mixture, ansatz="dressed"), solve(mixture, ansatz="product")]
    listed = telling.candidates(found, camera, detection.layout(plan, chosen), significance)
    verdicts = telling.verdicts(listed, camera, significance)
    if as_json:
        console.write_json({"candidates": [c._asdict() for c in listed], "verdicts": [v._asdict() for v in verdicts]})
        return 0
    rows = [
        (
            c.phase,
            f"{c.condensate:.1%}",
            *(f"{c.amplitude[k]:.2e}" for k in CHANNELS),
            *(f"{c.ratio[k]:.3g}" for k in CHANNELS),
        )
        for c in listed
    ]
    console.table(("candidate", "condensed", "A at k' = -k", "A at k' = k", "A12/Aaa, -k", "A12/Aaa, k"), rows)
    if len(listed) == 1:
        console.say("both ansaetze find this phase here; there is no other candidate to tell it from")
    for verdict in verdicts:
        if np.isfinite(verdict.shots):
            first, second = verdict.phases
            console.say(
                f"{first} or {second}: the peak at {WHERE[verdict.channel]} tells with {_shots(verdict.shots)} shots"
            )
    if any(c.condensate > 0 for c in listed):
        console.say(
            "a condensate shows Bragg peaks in the mean picture; its peak at k' = -k alone does not prove pairs"
        )
    return 0


def _print_improved(better: design.Improved, channel: str, spread: design.Spread | None) -> None:
    number = console.number
    rows = [
        (
            f"{k.name} ({k.unit})" if k.unit != "1" else k.name, number(k.start, 4), number(float(v), 4),
            f"{k.low:g} to {k.high:g}", {"low": "at its lower bound", "high": "at its upper bound", "": ""}[b],
        )
        for k, v, b in zip(better.knobs, better.values, better.bounds, strict=True)
    ]  # fmt: skip
    console.table(("knob", "before", "after", "bounds", ""), rows)
    name = {"pair": "pair peak", "antipair": "counterflow peak"}[channel]
    console.say(f"{name} at {WHERE[channel]}: {_shots(better.before)} shots before, {_shots(better.after)} after")
    held = [k.name for k, b in zip(better.knobs, better.bounds, strict=True) if b]
    if held:
        console.say(f"held back by the bounds of: {', '.join(held)}")
    for one in better.sensitivities:
        value = f"{number(one.value, 4)}{'' if one.unit == '1' else ' ' + one.unit}"
        console.say(f"1 % more {one.name} (from {value}) changes the shots by {one.per_cent:+.2g} %")
    if spread is not None:
        low, middle, high = (_shots(x) for x in spread.shots)
        console.say(
            f"calibration errors (depth 2 %, scattering lengths 1 %, T 10 %, as far as they apply): order there with "
            f"probability {spread.ordered:.2f}, shots {low} to {high} (16 to 84 %), median {middle}"
        )


def _shots(count: float) -> str:
    return f"{np.ceil(count):.0f}" if np.isfinite(count) else "no number of"


def _folder(out: str, force: bool) -> Path:
    folder = paths.results_folder(out, f"{NAME}.nc", force)
    paths.make_folder(folder)
    return folder


def _save(folder: Path, dataset: xr.Dataset, plan: Plan, name: str, silent: bool) -> None:
    if not dataset.attrs["title"]:
        dataset = dataset.assign_attrs(title=name.removesuffix(".toml"))
    dataset = dataset.assign_attrs(config_sha256=plan.spec.sha256())
    export.write_netcdf(dataset, paths.inside(folder, f"{NAME}.nc"))
    files = plots.save(figure.draw(dataset), paths.inside(folder, NAME))
    console.note(f"in {folder}: {NAME}.nc, {', '.join(path.name for path in files)}", silent)


def _pictures(
    plan: Plan, chosen: dict[str, float], row: Row, dataset: xr.Dataset, out: str, count: int, side: int, seed: int,
    force: bool, silent: bool,
) -> None:  # fmt: skip
    """Synthetic shots of the coldest point, in its own channel."""
    path = Path(out)
    if path.suffix not in (".nc", ".h5"):
        raise InputError(f'--shots-out {out[:60]}: must name a file that ends in ".nc" or ".h5"')
    if path.exists() and not force:
        raise OutputError(f"{path.name} exists already; replace it with --force")
    totals = [float(row.samples[0].regions[channel].total) for channel in CHANNELS]
    if max(totals) == 0:
        raise InputError("--shots-out: there is no pair or counterflow order at the lowest temperature to photograph")
    channel = CHANNELS[int(np.argmax(totals))]
    camera = detection.camera(plan, chosen)
    stack = synthetic.shots(camera, row.samples[0], channel, count, side, seed)
    made = synthetic.to_dataset(stack, camera, channel, seed, "pairs")
    export.write_netcdf(made, path)
    console.note(f"written: {path}: {count} shots of 2 x {side} x {side} pixels, {channel}, seed {seed}", silent)
