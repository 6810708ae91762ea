"""What an analyst declares: priors and spreads, what they do, and that they show."""

from __future__ import annotations

import math
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from makers import model_trace

from fieldlines import ChapmanLayer, FieldLineModel, saturated_density, tube_content
from whistler.commands.table import legend
from whistler.errors import UsageError
from whistler.fit import SMALL_SAMPLE
from whistler.pickfit import fit_picks
from whistler.rows import WhistlerRow
from whistler.settings import Settings
from whistler.station import Station, load_station
from whistler.trace import Trace

DEX = math.log(10.0)


def drawn(
    model: FieldLineModel,
    l_value: float,
    *,
    band_hz: tuple[float, float] = (1200.0, 9000.0),
    sd_s: float = 5e-4,
    density_factor: float = 1.0,
    seed: int = 3,
) -> Trace:
    return model_trace(
        model,
        l_value=l_value,
        density_m3=density_factor * float(saturated_density(l_value)),
        band_hz=band_hz,
        sd_s=sd_s,
        generator=np.random.default_rng(seed),
    )


def row_of(trace: Trace, **declared: object) -> WhistlerRow:
    (row,) = fit_picks({"a": trace}, settings=Settings(**declared))  # type: ignore[arg-type]
    return row


def test_a_density_prior_pulls_by_its_weight(model: FieldLineModel) -> None:
    """Identity: of two independent normal values the mean is weighted by one over variance.

    The free fit and the climatology times 1.15, along the ridge of L and density: ln density less
    the climatology's at the same L, a number with its own sigma from the free row's. To 15 %, since
    the ridge of good fits is not quite straight.
    """
    trace = drawn(model, 2.4, sd_s=1e-3)
    sd_dex, factor = 0.03, 1.15
    free = row_of(trace)
    held = row_of(
        trace, fit_prior="climatology", fit_prior_sd_dex=sd_dex, density_prior_factor=factor
    )
    assert (free.uncertainty_status, held.uncertainty_status) == ("ok", "ok")

    def excess(row: WhistlerRow) -> float:
        return math.log(row.equatorial_density_cm3 * 1e6 / float(saturated_density(row.l_value)))

    slope = -0.3145 * DEX * free.l_value  # of the climatology, in ln L
    by_l, by_density = (
        free.l_value_sd / free.l_value,
        free.equatorial_density_sd_cm3 / free.equatorial_density_cm3,
    )
    variance = by_density**2 + (slope * by_l) ** 2
    variance -= 2.0 * slope * by_l * by_density * free.l_density_correlation
    freedom = len(trace.time_s) - 3
    misfit = len(trace.time_s) * (free.fit_rms_s / 1e-3) ** 2 / freedom
    variance /= max(1.0, misfit) * (1.0 + SMALL_SAMPLE / freedom)  # what the row's are wider by
    weight = variance / (variance + (sd_dex * DEX) ** 2)
    wanted = excess(free) + weight * (math.log(factor) - excess(free))
    assert 0.05 < weight < 0.95
    assert excess(held) - excess(free) == pytest.approx(wanted - excess(free), rel=0.15)


def test_a_prior_that_says_more_than_the_trace_leaves_no_sigma(model: FieldLineModel) -> None:
    """Identity: half of the knowledge of the density is the least that the trace must bring."""
    trace = drawn(model, 2.1, band_hz=(1500.0, 6000.0))
    assert row_of(trace).uncertainty_status == "ok"
    wide = row_of(trace, fit_prior="climatology", fit_prior_sd_dex=0.3)
    assert wide.uncertainty_status == "ok"
    tight = row_of(trace, fit_prior="climatology", fit_prior_sd_dex=0.02)
    assert tight.uncertainty_status == "prior-dominated"
    assert math.isnan(tight.l_value_sd)
    assert math.isnan(tight.tube_content_sd_m2)
    assert math.isfinite(tight.equatorial_density_cm3)


def test_every_product_tells_a_prior(model: FieldLineModel) -> None:
    """Identity: the rows by a flag, the settings by their values, the table by a line."""
    trace = drawn(model, 2.6)
    assert "density-prior" not in row_of(trace).flags
    assert "density-prior" in row_of(trace, fit_prior="climatology").flags
    station = Station(fo_f2_mhz=6.0, fo_f2_sd_mhz=0.2)
    declared = Settings(
        fit_prior="climatology",
        fit_prior_sd_dex=0.2,
        density_prior_factor=1.4,
        density_exponent=0.8,
        density_exponent_sd=0.3,
        station=station,
    )
    values = declared.to_dict()
    assert (values["fit_prior"], values["fit_prior_sd_dex"]) == ("climatology", 0.2)
    assert values["station"]["ionosphere"]["fo_f2_sd_mhz"] == 0.2
    told = legend(declared)
    assert "prior   1.4 times the density climatology ± 0.2 decades entered every fit" in told
    assert "alpha   0.8 ± 0.3 declared" in told
    assert "foF2 6 ± 0.2 MHz, hmF2 300 ± 40 km declared" in told
    assert max(map(len, told.splitlines())) <= 80
    plain = legend(Settings())
    assert "declared" not in plain
    assert "entered every fit" not in plain


def test_unknown_priors_are_refused() -> None:
    """Identity: the message holds the value and what there is."""
    with pytest.raises(UsageError, match=r"fit_prior=saturated is not one of .*climatology"):
        Settings(fit_prior="saturated")
    with pytest.raises(UsageError, match=r"fit_prior_sd_dex=0.0 is outside"):
        Settings(fit_prior="climatology", fit_prior_sd_dex=0.0)


def test_an_ionosphere_known_better_narrows_the_profile_part(
    model: FieldLineModel, tmp_path: Path
) -> None:
    """Identity: the station file's sigmas go before the settings'; with none left, none is counted.

    At L 2.3 foF2 and hmF2 make a good part of the profile sigma; the exponent's is put at 0.
    """
    path = tmp_path / "s.toml"
    path.write_text("[ionosphere]\nfo_f2_mhz = 5\nfo_f2_sd_mhz = 0.15\nhm_f2_sd_km = 4\n")
    trace = drawn(model, 2.3)
    default = row_of(trace, density_exponent_sd=0.0)
    known = row_of(trace, density_exponent_sd=0.0, station=load_station(path))
    ratio = known.equatorial_density_profile_sd_cm3 / default.equatorial_density_profile_sd_cm3
    # a tenth of each sigma; a tenth in all, but for a little curvature
    assert ratio == pytest.approx(0.1, abs=0.03)
    assert known.l_value_sd == pytest.approx(default.l_value_sd, rel=0.02)


def test_tube_content_is_known_better_than_density(model: FieldLineModel) -> None:
    """Recovery: forty whistlers of other exponents and F2 layers, fitted with the default model.

    Relative combined sigma of tube content is less than two thirds of density's (what raises the
    profile aloft lowers the density that fits), and it covers: within 1.96 sigma at least 85 %
    (95 % less three of the scatter of forty), and within one between half and nine tenths.
    """
    generator = np.random.default_rng(21)
    pulls, ratios = [], []
    for _ in range(40):
        layer = ChapmanLayer(1e6 * float(np.clip(generator.normal(5.0, 1.5), 2.0, 9.0)), 3e5, 6e4)
        exponent = float(np.clip(generator.normal(1.0, 0.65), 0.0, 3.0))
        other = replace(model, density_exponent=exponent, layer=layer)
        l_value = generator.uniform(2.2, 3.0)
        trace = drawn(other, l_value, seed=int(generator.integers(2**31)))
        row = row_of(trace)
        assert row.uncertainty_status == "ok"
        density_m3 = float(saturated_density(l_value))
        true_m2 = tube_content(l_value, equatorial_density_m3=density_m3, model=other)
        sd_m2 = math.hypot(row.tube_content_sd_m2, row.tube_content_profile_sd_m2)
        density_sd = math.hypot(
            row.equatorial_density_sd_cm3, row.equatorial_density_profile_sd_cm3
        )
        pulls.append((row.tube_content_m2 - true_m2) / sd_m2)
        ratios.append(sd_m2 / row.tube_content_m2 / (density_sd / row.equatorial_density_cm3))
    assert max(ratios) < 0.67
    assert np.mean(np.abs(pulls) <= 1.96) >= 0.85
    assert 0.5 <= np.mean(np.abs(pulls) <= 1.0) <= 0.9


def test_the_statistical_error_of_tube_content_is_its_scatter(model: FieldLineModel) -> None:
    """Recovery: 40 draws of one trace; stated over scatter 1.06 (few points) to 11 %, thrice."""
    rows = [row_of(drawn(model, 2.5, seed=seed)) for seed in range(40)]
    scatter = np.std([math.log(row.tube_content_m2) for row in rows], ddof=1)
    stated = np.mean([row.tube_content_sd_m2 / row.tube_content_m2 for row in rows])
    assert stated / scatter == pytest.approx(1.06, rel=0.33)
