"""An invented close-out for the report's tests: every number drawn at random or made up, nothing fitted."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np

from reconcile.campaign.campaign import Beam, Campaign, EnergyMeter, Liquid, Prior, Probe, Quantity, Table, Target
from reconcile.campaign.inputs import describe
from reconcile.campaign.kinds import KINDS
from reconcile.campaign.readings import Decision, FileRead, Gathered, Reading, Shot
from reconcile.campaign.refusal import Note, Place, Refused
from reconcile.inference.outcome import (
    Band,
    CloseOut,
    InputResult,
    KindResult,
    Posterior,
    ReadingResult,
    Sampling,
    Share,
    ShotResult,
    Strained,
    Summary,
    Warned,
)

SCRIPT = "<script>alert('crater')</script>"
FORMULA = '=HYPERLINK("http://example.invalid","x")'
TYPESETTING = '#panic("x") $ ` * _ <a> @b \\ ~ // /* */'
CONTROL = "bell\x07 escape\x1b[31m null\x00 turn\u202eback"
FOREIGN = "Δίοδος μ — проверка зеркала — 气泡异常 — עברית — 😀"
LONG = "A very long title about gold under water " * 4 + "x" * 36

# name: centre, relative or absolute sd, prior centre, prior sd; free inputs with made-up posteriors.
FREE = {
    "absorbed_fraction": (0.31, 0.09, 0.35, 0.17),
    "absorption_exponent": (0.03, 0.06, 0.0, 0.15),
    "delivery": (0.82, 0.02, 0.82, 0.02),
    "heated_depth": (118e-9, 24e-9, 110e-9, 52e-9),
    "heated_depth_exponent": (-0.18, 0.05, -0.2, 0.12),
    "removal_energy_density": (6.3e9, 1.7e9, 6.5e9, 2.7e9),
    "bubble_yield": (0.09, 0.03, 0.15, 0.17),
    "spot_radius": (21.1e-6, 0.4e-6, 21e-6, 1e-6),
    "meter_calibration": (1.0, 0.03, 1.0, 0.03),
    "scale.profiler": (1.0, 0.019, 1.0, 0.02),
    "energy_jitter": (0.034, 0.006, 0.034, 0.018),
    "scatter.crater-depth": (0.04, 0.012, 0.06, 0.05),
    "trigger_offset": (2e-9, 18e-9, 0.0, 20e-9),
}
FIXED = {"bubble_gas": 0.003, "melt_viscosity": 3e-3, "melt_surface_tension": 0.5}
DERIVED = {
    "coupling": (0.254, 0.073),
    "coupling_over_threshold": (3.6e-4, 1.0e-5),
    "absorbed_fluence_per_energy": (3.6e8, 1.1e8),
    "incident_fluence_per_energy": (1.17e9, 5e7),
    "threshold_fluence": (712.0, 205.0),
}


def quantity(value: float, u: float | None, unit: str, text: str) -> Quantity:
    """Return a quantity as a manifest would hold it."""
    return Quantity(value, u, unit, text)


def invented_campaign(*, hostile: bool) -> Campaign:
    """Return a manifest of an invented laboratory."""
    key = Place("campaign.toml", key="readings")
    return Campaign(
        name="tarn-02",
        folder=Path("tarn"),
        title=LONG if hostile else "Gold under water, tarn run 2",
        date="2026-03-14",
        about={
            "laboratory": SCRIPT if hostile else "Fellside Optics Bench",
            "operator": FOREIGN if hostile else "M. Ashgrove",
            "note": f"{CONTROL} {TYPESETTING}" if hostile else "mirror cleaned before s001",
        },
        target=Target("gold", quantity(1e-3, None, "m", "1 mm")),
        liquid=Liquid("water", quantity(6e-3, None, "m", "6.0 mm"), wall_distance=quantity(15e-3, None, "m", "15 mm")),
        beam=Beam(
            wavelength=quantity(1030e-9, None, "m", "1030 nm"),
            pulse_duration=quantity(350e-15, None, "s", "350 fs"),
            spot_radius=quantity(21e-6, 1e-6, "m", "21 um ± 1 um"),
            delivery=quantity(0.82, 0.02, "1", "0.82 ± 0.02"),
        ),
        meter=EnergyMeter(
            quantity(1.0, 0.03, "1", "1.00 ± 0.03"),
            quantity(0.03, None, "1", "3 %"),
            {"identity": FORMULA if hostile else "meter 2", "certificate": "K-1182"},
        ),
        probe=Probe(standoff=quantity(5e-3, 1e-4, "m", "5.0 mm ± 0.1 mm"), about={"identity": "needle 4"}),
        log=Table("log", "log", Place("campaign.toml", key="shots"), file="shots.xlsx"),
        tables=(
            Table("crater-depth", "profiler", key, file="craters.xlsx", scale=quantity(1.0, 0.02, "1", "1.00 ± 0.02")),
            Table("bubble-radius", "2", key, file="radii.csv"),
        ),
        ambient_pressure=quantity(101325.0, None, "Pa", "101.325 kPa"),
        liquid_temperature=quantity(295.15, None, "K", "22 degC"),
        priors={"bubble_gas": Prior("fixed", 0.003, 0, "fixed(0.003)")},
        unused_uncertainties=("liquid.path",),
    )


def summary(draws: np.ndarray) -> Summary:
    """Return the seven numbers of some draws."""
    quantiles = np.quantile(draws, [0.025, 0.16, 0.5, 0.84, 0.975])
    return Summary(float(draws.mean()), float(draws.std(ddof=1)), *(float(value) for value in quantiles))


def _draws(rng: np.random.Generator, mean: float, sd: float, scale: str, size: int) -> np.ndarray:
    if scale == "log" and mean > 0:
        width = np.sqrt(np.log1p((sd / mean) ** 2))
        return np.exp(rng.normal(np.log(mean) - width**2 / 2, width, size))
    return rng.normal(mean, sd, size)


def _inputs(rng: np.random.Generator, chains: int, steps: int) -> tuple[tuple[InputResult, ...], Posterior]:
    results, names, columns = [], [], []
    for name, (mean, sd, prior_mean, prior_sd) in FREE.items():
        entry = describe(name)
        draws = _draws(rng, mean, sd, entry.scale, chains * steps)
        names.append(name)
        columns.append(draws)
        on_scale = np.log(draws) if entry.scale == "log" else draws
        prior = Prior("normal", prior_mean, prior_sd, f"normal({prior_mean:g}, {prior_sd:g})")
        informed = max(0.0, 1 - (sd / prior_sd) ** 2)
        numbers = (float(on_scale.mean()), float(on_scale.std(ddof=1)))
        results.append(InputResult(entry, summary(draws), prior, prior_mean, prior_sd, informed, False, *numbers))
    for name, (mean, sd) in DERIVED.items():
        entry = describe(name)
        draws = _draws(rng, mean, sd, entry.scale, chains * steps)
        names.append(name)
        columns.append(draws)
        numbers = (float(np.log(draws).mean()), float(np.log(draws).std(ddof=1)))
        results.append(InputResult(entry, summary(draws), None, mean, 3 * sd, 0.89, False, *numbers))
    for name, value in FIXED.items():
        exact = Summary(value, 0.0, value, value, value, value, value)
        prior = Prior("fixed", value, 0, f"fixed({value:g})")
        results.append(InputResult(describe(name), exact, prior, value, 0.0, None, True, float(np.log(value)), 0.0))
    stacked = np.stack(columns, axis=-1).reshape(chains, steps, len(names))
    return tuple(results), Posterior(tuple(names), stacked, rng.normal(-200, 4, (chains, steps)))


def _shots(rng: np.random.Generator, count: int, hostile: bool) -> list[ShotResult]:
    """Return shots in the log's order; the 2nd is misread, the 3rd stray, every 9th from the 5th set aside."""
    results = []
    for i in range(count):
        energy = float(rng.uniform(2e-6, 40e-6))
        shot = Shot(
            name=f"s{i + 1:03d}" if not (hostile and i == 1) else "+7 " + "n" * 60,
            metered_energy=energy,
            place=Place("shots.xlsx", "log", f"A{i + 2}"),
            pulses=1 if i % 4 else 10,
            level=None if i % 11 == 10 else f"level {1 + i % 5}",
            sample="c1" if i % 3 == 0 else None,
            note=FOREIGN if hostile and i % 5 == 0 else None,
            set_aside=None if i % 9 != 4 else (f"{SCRIPT} {FORMULA}" if hostile else "lamp lit during the shot"),
            kept="looked at the frame again, sound" if i == 2 else None,
        )
        ratio = 1.83 if i == 1 else float(rng.normal(1, 0.03))
        incident = rng.lognormal(np.log(1.17e9 * energy * ratio), 0.05, 400)
        verdict = "set-aside" if shot.set_aside else "misread" if i == 1 else "stray" if i == 3 else "kept"
        reasons = {
            "set-aside": (f"set aside: {shot.set_aside}",),
            "misread": ("crater depth and bubble radius both call for 1.83 times the logged energy",),
            "stray": ("the crater depth lies 6.2 sd below what the other readings expect",),
        }.get(verdict, ())
        results.append(
            ShotResult(
                shot,
                summary(incident * 0.31),
                summary(incident),
                ratio,
                0.03,
                0.998 if i == 1 else 0.004,
                verdict,
                reasons,
            )
        )
    return results


EXPECTED = {
    "crater-depth": lambda energy: 1.1e-7 * np.log(energy / 1.2e-6),
    "crater-diameter": lambda energy: np.sqrt(2 * 21e-6**2 * np.log(energy / 1.2e-6)),
    "bubble-radius": lambda energy: 2.1e-4 * (energy / 1e-5) ** (1 / 3),
    "bubble-lifetime": lambda energy: 4e-5 * (energy / 1e-5) ** (1 / 3),
    "pressure-integral": lambda energy: 3e6 * (energy / 1e-5) ** 1.2,
    "median-diameter": lambda energy: 9e-9 * (energy / 1e-5) ** 0.1,
}
DELAYS = (2e-6, 8e-6)


def _readings(rng: np.random.Generator, shots: list[ShotResult], hostile: bool) -> list[ReadingResult]:
    results = []
    for i, result in enumerate(shots):
        shot = result.shot
        for kind in ("crater-depth", "crater-diameter", "bubble-radius", "bubble-lifetime", "pressure-integral"):
            for delay in DELAYS if kind == "bubble-radius" else (None,):
                expected = float(EXPECTED[kind](shot.metered_energy))
                value = float(expected * result.energy_ratio ** (1 / 3) * rng.normal(1, 0.05))
                verdict, p_stray = "used", float(rng.uniform(0, 0.05))
                if i == 3 and kind == "crater-depth":
                    value, verdict, p_stray = 0.2 * expected, "stray", 0.9997
                limit = 2e-8 if kind == "crater-depth" and i % 7 == 6 else None
                if limit is not None:
                    verdict = "below-limit"
                if shot.set_aside:
                    verdict, p_stray = "set-aside", None
                source = FORMULA if hostile and i == 0 else "craters.xlsx"
                reading = Reading(
                    kind,
                    shot.name,
                    None,
                    "profiler",
                    Place(source, "profiler", f"C{i + 2}"),
                    delay=delay,
                    value=None if limit else value,
                    u=None if limit else 0.03 * expected,
                    limit=limit,
                    set_aside=shot.set_aside,
                )
                fitted = shot.set_aside is None
                results.append(
                    ReadingResult(
                        reading, expected if fitted else None, 0.04 * expected if fitted else None, p_stray, verdict
                    )
                )
        if i % 4 == 0:
            volume = Reading("crater-volume", shot.name, None, "profiler", Place("maps/a.tif"), value=4.2e-17, u=3e-18)
            results.append(ReadingResult(volume, None, None, None, "information"))
    sample = Reading("median-diameter", None, "c1", "tem", Place("tem.csv", line=2), value=9.4e-9, u=0.4e-9)
    results.append(ReadingResult(sample, 9.1e-9, 0.5e-9, 0.02, "used"))
    return results


def _bands() -> tuple[Band, ...]:
    energy = np.geomspace(1.5e-6, 45e-6, 60)
    bands = []
    for kind, law in EXPECTED.items():
        for delay in DELAYS if kind == "bubble-radius" else (None,):
            middle = law(energy)
            bands.append(Band(kind, delay, energy, 3.6e8 * energy, 0.85 * middle, middle, 1.17 * middle))
    return tuple(bands)


def _gathered(shots: list[ShotResult], readings: list[ReadingResult], hostile: bool) -> Gathered:
    text = f"{SCRIPT} {FORMULA} {TYPESETTING} {CONTROL} {FOREIGN}" if hostile else "cannot be measured: no edge found"
    return Gathered(
        campaign=invented_campaign(hostile=hostile),
        shots=tuple(result.shot for result in shots),
        readings=tuple(result.reading for result in readings),
        refused=(
            Refused("frames/s031_800ns.png", text),
            Refused("@shots.xlsx!log!B40", "found 'n/a'; expected an energy above 0"),
        ),
        notes=(Note("shots.xlsx!log!A14", f"-1 {text}"),),
        decisions=(
            Decision(
                shots[0].shot.name,
                None,
                None,
                None,
                "keep",
                text,
                FOREIGN if hostile else "M. Ashgrove",
                "2026-03-15",
                Place("d.csv"),
            ),
        ),
        files=(FileRead("shots.xlsx", "a1" * 32), FileRead("radii.csv", "b2" * 32)),
        unasked=("old/notes.txt", SCRIPT if hostile else "holiday.jpg"),
    )


def invented_close_out(
    count: int = 12, *, hostile: bool = False, seed: int = 5, status: str = "provisional"
) -> CloseOut:
    """Return a close-out of `count` shots; `hostile` puts text into it that no output may take for anything but text."""
    rng = np.random.default_rng(seed)
    inputs, posterior = _inputs(rng, 4, 250)
    shots = _shots(rng, count, hostile)
    readings = _readings(rng, shots, hostile)
    free = tuple(FREE)
    flat = np.stack([posterior[name] for name in free])
    used = {kind: sum(1 for reading in readings if reading.reading.kind == kind) for kind in EXPECTED}
    sentence = "The others cannot predict it." if not hostile else SCRIPT
    return CloseOut(
        gathered=_gathered(shots, readings, hostile),
        seed=1,
        status=status,
        status_reasons=() if status == "final" else ("the crater depth contradicts the other kinds (p = 0.0004)",),
        inputs=inputs,
        correlation=(free, np.corrcoef(flat)),
        scale_correlation=(free, np.corrcoef(flat)),
        budget={
            "absorbed_fraction": (
                Share("removal_energy_density", 0.31),
                Share("absorbed_fraction", 0.28),
                Share("bubble_yield", 0.12),
                Share("readings", 0.29),
            ),
            "coupling": (Share("removal_energy_density", 0.55), Share("readings", 0.45)),
        },
        shots=tuple(shots),
        readings=tuple(readings),
        kinds=(
            KindResult(
                "crater-depth", used["crater-depth"], 0.0004, False, "Its craters are deeper than the bubbles allow."
            ),
            KindResult("bubble-radius", used["bubble-radius"], 0.41, True, ""),
            KindResult("median-diameter", 1, None, None, sentence),
        ),
        strained=(Strained("spot_radius", 0.0011, "A wrong spot radius would be taken up by heated_depth."),),
        warnings=(
            Warned(
                "s002",
                "power above the self-focusing limit of the liquid",
                4.1e6,
                2.9e6,
                "W",
                "Lower the energy or widen the beam.",
            ),
            Warned(
                "campaign",
                f"{TYPESETTING} {FOREIGN}" if hostile else "no entry radius given",
                None,
                None,
                "",
                "Give beam.entry_radius.",
            ),
        ),
        could_not_tell=("The readings say nothing about the fragment factor.",),
        sampling=Sampling(1240.0, 1.004, 24000, 31.4, True, 1000, 0.02, 41000),
        posterior=posterior,
        bands=_bands(),
    )


def without_a_number(close_out: CloseOut) -> CloseOut:
    """Return the same close-out with a NaN and an infinity where a fit might leave them."""
    first = close_out.shots[0]
    broken = replace(
        first, energy_ratio=float("nan"), absorbed_fluence=replace(first.absorbed_fluence, q975=float("inf"))
    )
    return replace(
        close_out, shots=(broken, *close_out.shots[1:]), sampling=replace(close_out.sampling, max_rhat=float("nan"))
    )


UNITS = {kind.unit for kind in KINDS.values()}
