import inspect

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from envflux.environments import (
    SOLAR_CONSTANTS,
    Environment,
    albedo_zenith_increment,
    environment_preset,
    environment_presets,
    solar_constant,
    solar_irradiance_w_m2,
)
from envflux.errors import InputError

# The printed precision of the distances below, 1e-8 au, moves the irradiance by 3e-5 W/m2; the
# references are printed to 1e-3 W/m2.
PRINTED_W_M2 = 6e-4

# The polynomial's values are printed to 1e-6.
PRINTED_INCREMENT = 6e-7


@pytest.mark.parametrize(
    ("name", "expected"),
    [
        ("IAU 2015 B3", 1361.0),  # IAU 2015 Resolution B3, exact
        ("ASTM E490-00a", 1366.1),  # ASTM E490-00a
        ("Kopp and Lean 2011", 1360.8),  # abstract
        ("Gueymard 2018", 1361.1),  # abstract
        ("gueymard 2018", 1361.1),
    ],
)
def test_solar_constants_by_the_name_of_their_standard(name: str, expected: float) -> None:
    assert solar_constant(name) == expected


def test_the_default_agrees_with_a_general_library() -> None:
    # pvlib's default is that of ASTM E490-00a.
    irradiance = pytest.importorskip("pvlib.irradiance")
    default = inspect.signature(irradiance.get_extra_radiation).parameters["solar_constant"].default
    assert solar_constant("ASTM E490-00a") == default


def test_every_solar_constant_says_where_it_comes_from() -> None:
    for entry in SOLAR_CONSTANTS.values():
        assert entry.source
        assert entry.provenance == "from memory" or entry.provenance.startswith("seen: ")
        assert 1360.0 < entry.value_w_m2 < 1372.0
    assert str(SOLAR_CONSTANTS["Kopp and Lean 2011"]).startswith("Kopp and Lean 2011: 1360.8 ± 0.5 W/m2")
    with pytest.raises(TypeError):
        SOLAR_CONSTANTS["mine"] = SOLAR_CONSTANTS["WRC 1985"]  # type: ignore[index]  # must be refused


@pytest.mark.parametrize(
    ("distance_au", "for_1361", "for_1366", "for_1367"),
    [
        # Published almanac distances, inverse square evaluated outside this package.
        (0.98325706, 1407.745, 1413.020, 1413.951),  # perihelion 2021-01-02
        (1.016729224, 1316.581, 1321.514, 1322.385),  # aphelion 2021-07-05
        (0.9833069487, 1407.602, 1412.877, 1413.808),  # perihelion 2024-01-03
    ],
)
def test_irradiance_at_published_perihelia_and_aphelia(
    distance_au: float, for_1361: float, for_1366: float, for_1367: float
) -> None:
    assert solar_irradiance_w_m2("IAU 2015 B3", distance_au) == pytest.approx(for_1361, abs=PRINTED_W_M2)
    assert solar_irradiance_w_m2(1366.1, distance_au) == pytest.approx(for_1366, abs=PRINTED_W_M2)
    assert solar_irradiance_w_m2(1367.0, distance_au) == pytest.approx(for_1367, abs=PRINTED_W_M2)


def test_irradiance_keeps_the_shape_and_lets_nan_through() -> None:
    found = solar_irradiance_w_m2(1361.0, [[1.0, 2.0], [np.nan, 0.5]])
    assert found.shape == (2, 2)
    np.testing.assert_array_equal(found, [[1361.0, 340.25], [np.nan, 5444.0]])
    assert solar_irradiance_w_m2(1361.0, []).shape == (0,)
    with pytest.raises(InputError, match=r"^distance_au is 0.0, but it must be above 0$"):
        solar_irradiance_w_m2(1361.0, [1.0, 0.0])


def test_zenith_increment_matches_the_published_polynomial() -> None:
    # NASA/TM-2001-211221, evaluated outside this package from the coefficients seen in three public texts.
    theta = [0, 10, 20, 30, 40, 45, 50, 60, 65, 70, 75, 80, 85, 90]
    expected = [
        0.000000,
        0.011728,
        0.020148,
        0.027389,
        0.036760,
        0.043602,
        0.052751,
        0.081027,
        0.101865,
        0.128433,
        0.161772,
        0.202994,
        0.253288,
        0.313913,
    ]
    np.testing.assert_allclose(albedo_zenith_increment(theta), expected, rtol=0, atol=PRINTED_INCREMENT)


@pytest.mark.parametrize(
    ("beta_deg", "expected"),
    # Orbit means weighted by the cosine of the zenith angle, as the memorandum's Table 4.2.1-1 prints them:
    # 0.04 at beta 0 was seen quoted, the others are from memory.
    [(0, 0.04), (20, 0.05), (40, 0.07), (50, 0.09), (60, 0.12), (70, 0.16), (80, 0.22)],
)
def test_zenith_increment_gives_the_published_orbit_means(beta_deg: float, expected: float) -> None:
    angle = np.linspace(-np.pi / 2, np.pi / 2, 20_001)
    cosine = np.cos(angle) * np.cos(np.radians(beta_deg))
    theta = np.degrees(np.arccos(cosine))
    mean = np.trapezoid(albedo_zenith_increment(theta) * cosine, angle) / np.trapezoid(cosine, angle)
    # The table is printed to two decimals.
    assert mean == pytest.approx(expected, abs=0.0051)


def test_zenith_increment_ends_at_the_terminator() -> None:
    assert albedo_zenith_increment(np.nextafter(90.0, 91.0)) == 0.0
    assert albedo_zenith_increment(90.0) > 0.3
    assert np.isnan(albedo_zenith_increment([np.nan, 10.0])).tolist() == [True, False]
    with pytest.raises(InputError, match=r"^theta_deg is -1.0, but it must be 0 or more$"):
        albedo_zenith_increment([3.0, -1.0])


def test_environment_takes_the_contract_call_by_name_and_by_position() -> None:
    named = Environment(solar_constant_w_m2=1361, albedo=0.3, planetary_ir_w_m2=237)
    assert named == Environment(1361, 0.3, 237)
    assert named == Environment(albedo=0.3, planetary_ir_w_m2=237)  # IAU 2015 B3 is the default
    assert named.zenith_correction == "none"
    assert named.radiating_radius_km == 6378.137  # WGS 84 equatorial radius
    order = ["solar_constant_w_m2", "albedo", "planetary_ir_w_m2"]
    assert list(inspect.signature(Environment).parameters)[:3] == order


def test_environment_takes_a_standard_and_remembers_it() -> None:
    environment = Environment("ASTM E490-00a", 0.3, 237)
    assert environment.solar_constant_w_m2 == 1366.1
    assert environment.source.startswith("solar constant: ASTM E490-00a, ")
    assert Environment.from_json(environment.to_json()) == environment
    assert Environment("WRC 1985", 0.3, 237, source="project memo 4").source == "project memo 4"


@pytest.mark.parametrize(
    ("fields", "message"),
    [
        ({"albedo": 1.3}, "albedo is 1.3, but it must be at least 0 and at most 1"),
        ({"albedo": float("nan")}, "albedo is nan, but it must be a finite number"),
        ({"planetary_ir_w_m2": -5}, "planetary_ir_w_m2 is -5, but it must be at least 0 and at most 2000"),
        (
            {"solar_constant_w_m2": 13610},
            "solar_constant_w_m2 is 13610, but it must be at least 0 and at most 2000",
        ),
        (
            {"radiating_radius_km": 30.0},
            "radiating_radius_km is 30.0, but it must be at least 6300 and at most 6500",
        ),
        (
            {"zenith_correction": "elements"},
            "zenith_correction is 'elements', but it must be 'none', 'element' or 'sub-point'"
            " (did you mean 'element'?)",
        ),
        (
            {"zenith_correction": "element", "albedo": 0.7},
            "albedo is 0.7, but it must be at most 0.68 with a zenith correction, which adds up to 0.31",
        ),
        ({"albedo": "0.3"}, "albedo is '0.3', but it must be a number"),
    ],
)
def test_bad_environments_are_one_sentence(fields: dict[str, object], message: str) -> None:
    table = {"solar_constant_w_m2": 1361, "albedo": 0.3, "planetary_ir_w_m2": 237, **fields}
    for build in (lambda: Environment(**table), lambda: Environment.from_table(table)):
        with pytest.raises(InputError) as caught:
            build()
        assert str(caught.value) == message


def test_unknown_standards_list_the_known_ones() -> None:
    with pytest.raises(InputError, match=r"^solar_constant_w_m2 is 'ASTM E490', .*\(did you mean 'ASTM E490-00a'\?\)$"):
        Environment("ASTM E490", 0.3, 237)
    with pytest.raises(InputError, match=r"^name is 'IAU', but it must be one of: IAU 2015 B3, "):
        solar_constant("IAU")
    with pytest.raises(InputError, match=r"^name is 'SSP 41000 warm', .*\(did you mean 'SSP 41000 "):
        environment_preset("SSP 41000 warm")
    with pytest.raises(InputError, match=r"^name is 7, but it must be one of: "):
        environment_preset(7)  # type: ignore[arg-type]  # wrong on purpose


def test_presets_carry_the_source_of_every_value() -> None:
    presets = environment_presets()
    assert len({preset.name for preset in presets}) == len(presets) > 5
    for preset in presets:
        for how in (preset.solar_provenance, preset.albedo_provenance, preset.planetary_ir_provenance):
            assert how == "from memory" or how.startswith("seen")
        environment = environment_preset(preset.name)
        assert (environment.solar_constant_w_m2, environment.albedo, environment.planetary_ir_w_m2) == (
            preset.solar_constant_w_m2,
            preset.albedo,
            preset.planetary_ir_w_m2,
        )
        for part in ("solar constant: ", "; albedo: ", "; planetary IR: "):
            assert part in environment.source
        assert preset.seen == ("from memory" not in environment.source)
        assert str(preset) in repr(presets)
    assert presets._repr_html_().count("<tr>") == len(presets) + 1


@pytest.mark.parametrize(
    ("name", "distance_au", "irradiance", "albedo", "planetary_ir"),
    [
        # SSP 41000 as quoted in a secondary text: irradiance at the season's extreme, albedo, infrared.
        ("SSP 41000 cold", 1.016710, 1321.0, 0.20, 206.0),
        ("SSP 41000 hot", 0.983290, 1423.0, 0.40, 286.0),
        # Handbook pair 1322 / 1414 W/m2, from memory; albedo and infrared common practice, no source.
        ("common practice cold", 1.016710, 1322.0, 0.25, 218.0),
        ("common practice hot", 0.983290, 1414.0, 0.35, 258.0),
        # ECSS-E-ST-10-04C annex F.5.1 and F.5.2: mean albedo and infrared; the solar constant from memory.
        ("ECSS-E-ST-10-04C Rev.1", 1.0, 1361.0, 0.30, 230.0),
        ("ECSS-E-ST-10-04C", 1.0, 1366.1, 0.30, 230.0),
        # NASA CERES EBAF-TOA Ed4.0, global means, from memory.
        ("CERES EBAF-TOA Ed4.0", 1.0, 1361.0, 0.291, 240.1),
    ],
)
def test_presets_return_the_published_figures(
    name: str, distance_au: float, irradiance: float, albedo: float, planetary_ir: float
) -> None:
    preset = environment_preset(name)
    # Published irradiances are printed to 1 W/m2.
    assert solar_irradiance_w_m2(preset.solar_constant_w_m2, distance_au) == pytest.approx(irradiance, abs=0.5)
    assert preset.albedo == albedo
    assert preset.planetary_ir_w_m2 == planetary_ir


def test_global_means_balance() -> None:
    # Loeb et al. 2018, from memory: incoming 340.0, reflected 99.1, outgoing 240.1 W/m2, so 0.8 stays. The
    # nominal solar constant over 4 lies 0.25 above their incoming (the Earth is no sphere), and the albedo
    # printed to three decimals stands for 0.17.
    mean = environment_preset("CERES EBAF-TOA Ed4.0")
    absorbed = mean.solar_constant_w_m2 / 4.0 * (1.0 - mean.albedo)
    assert absorbed == pytest.approx(mean.planetary_ir_w_m2, abs=1.22)


@given(
    st.floats(0.0, 2000.0),
    st.floats(0.0, 1.0),
    st.floats(0.0, 2000.0),
    st.sampled_from(["none", "element", "sub-point"]),
    st.floats(6300.0, 6500.0),
)
def test_environments_survive_json(solar: float, albedo: float, infrared: float, zenith: str, radius: float) -> None:
    scaled = albedo if zenith == "none" else 0.68 * albedo
    environment = Environment(solar, scaled, infrared, zenith_correction=zenith, radiating_radius_km=radius)
    assert Environment.from_json(environment.to_json()) == environment
