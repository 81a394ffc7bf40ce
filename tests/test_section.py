"""What a DepthSection says in CSV and JSON."""

import csv
import dataclasses
import io
import json

import numpy as np
import pytest
from made_section import made_section

from interp.section import DepthSection
from interp.section_json import read_section_json, section_from_json, section_to_json
from interp.section_tables import bound_columns, depth_columns, to_csv, velocity_columns
from interp.velocity_zones import velocity_zones
from picker.errors import InputError
from picker.units import METRES_PER_FOOT, columns_in

# The contract with everybody who reads the files (design, Contracts).
DEPTHS = (
    "x_m,y_m,along_m,surface_z_m,layer,depth_m,depth_lo_m,depth_hi_m,bound_shallow_m,bound_deep_m,"
    "velocity_above_m_s,velocity_below_m_s,coverage,deeper_than_m,picks,note"
)
BOUNDS = "along_m,layer,kind,assumption,depth_shallow_m,depth_deep_m"
VELOCITIES = "layer,from_m,to_m,velocity_m_s,velocity_lo_m_s,velocity_hi_m_s,picks,note"

HALF_CENTIMETRE = 0.005 + 1e-9  # tables keep centimetres
HALF_M_S = 0.5 + 1e-9  # and whole metres per second


def rows(text: str) -> list[dict[str, str]]:
    return list(csv.DictReader(io.StringIO(text)))


def same(left: DepthSection, right: DepthSection) -> bool:
    """Equal in every field, NaN equal to NaN."""

    def equal(a: object, b: object) -> bool:
        if dataclasses.is_dataclass(a) and not isinstance(a, type):
            return all(equal(getattr(a, f.name), getattr(b, f.name)) for f in dataclasses.fields(a))
        if isinstance(a, np.ndarray):
            number = a.dtype.kind == "f"
            return isinstance(b, np.ndarray) and np.array_equal(a, b, equal_nan=number)
        if isinstance(a, tuple):
            return len(a) == len(b) and all(map(equal, a, b))  # type: ignore[arg-type]
        return a == b

    return equal(left, right)


def rounded(section: DepthSection) -> DepthSection:
    """The section with its samples as section.json keeps them: millimetres and 0.1 m/s."""
    return dataclasses.replace(
        section,
        depth_samples_m=np.round(section.depth_samples_m, 3),
        velocity_samples_m_s=np.round(section.velocity_samples_m_s, 1),
    )


def test_table_columns_are_those_of_the_contract_in_order() -> None:
    section = made_section()
    assert to_csv(depth_columns(section)).splitlines()[0] == DEPTHS
    assert to_csv(bound_columns(section)).splitlines()[0] == BOUNDS
    assert to_csv(velocity_columns(section)).splitlines()[0] == VELOCITIES


def test_every_geophone_has_a_row_for_every_refractor() -> None:
    section = made_section(layers=2, stations=24)
    table = rows(to_csv(depth_columns(section)))
    places = [(float(row["along_m"]), int(row["layer"])) for row in table]
    assert places == [(x, layer) for x in section.along_m.tolist() for layer in (1, 2)]


def test_depths_and_intervals_are_the_quantiles_of_the_samples() -> None:
    section = made_section()
    row = next(r for r in rows(to_csv(depth_columns(section))) if r["along_m"] == "25.00" and r["layer"] == "2")
    low, median, high = np.quantile(section.depth_samples_m[:, 1, 5], (0.05, 0.5, 0.95))
    assert float(row["depth_m"]) == pytest.approx(median, abs=HALF_CENTIMETRE)
    assert float(row["depth_lo_m"]) == pytest.approx(low, abs=HALF_CENTIMETRE)
    assert float(row["depth_hi_m"]) == pytest.approx(high, abs=HALF_CENTIMETRE)
    assert float(row["velocity_above_m_s"]) == pytest.approx(
        np.median(section.velocity_samples_m_s[:, 1, 5]), abs=HALF_M_S
    )
    assert float(row["velocity_below_m_s"]) == pytest.approx(
        np.median(section.velocity_samples_m_s[:, 2, 5]), abs=HALF_M_S
    )
    assert float(row["surface_z_m"]) == pytest.approx(section.station_xyz[5, 2], abs=HALF_CENTIMETRE)


def test_a_point_without_control_has_empty_numbers_and_a_note_that_says_so() -> None:
    section = made_section(gap=True)
    row = next(r for r in rows(to_csv(depth_columns(section))) if r["along_m"] == "115.00" and r["layer"] == "2")
    numbers = ("depth_m", "depth_lo_m", "depth_hi_m", "bound_shallow_m", "bound_deep_m", "velocity_below_m_s")
    assert [row[name] for name in numbers] == [""] * len(numbers)
    assert (row["coverage"], row["deeper_than_m"]) == ("none", "9.00")
    assert "deeper" in row["note"]


def test_a_note_of_the_interpretation_is_passed_on() -> None:
    row = next(r for r in rows(to_csv(depth_columns(made_section()))) if r["along_m"] == "50.00" and r["layer"] == "2")
    assert row["note"] == "interval rests on interpolation between controlled points"


def test_feet_change_every_length_and_velocity_and_the_head_says_so() -> None:
    section = made_section()
    metres, feet = depth_columns(section), columns_in("ft", depth_columns(section))
    table = rows(to_csv(feet))
    assert list(table[0]) == DEPTHS.replace("_m_s", "_ft_s").replace("_m", "_ft").split(",")
    assert float(table[11]["depth_ft"]) * METRES_PER_FOOT == pytest.approx(metres["depth_m"][11], abs=HALF_CENTIMETRE)
    assert float(table[11]["velocity_above_ft_s"]) * METRES_PER_FOOT == pytest.approx(
        metres["velocity_above_m_s"][11], abs=HALF_M_S
    )


def test_the_tables_never_print_a_negative_zero_or_nan() -> None:
    section = made_section()
    text = to_csv(depth_columns(dataclasses.replace(section, along_m=section.along_m - 0.001)))
    assert "-0.00" not in text
    assert "nan" not in text


def test_a_velocity_that_does_not_change_along_the_line_is_one_row() -> None:
    zones = velocity_zones(made_section(layers=2))
    assert [(zone.from_m, zone.to_m) for zone in zones if zone.layer == 1] == [(0.0, 115.0)]


def test_a_gradual_change_of_velocity_is_told_in_thirds_that_cover_the_line_without_gaps() -> None:
    zones = [zone for zone in velocity_zones(made_section(layers=2)) if zone.layer == 3]
    assert len(zones) == 3
    assert (zones[0].from_m, zones[-1].to_m) == (0.0, 115.0)
    assert [zone.to_m for zone in zones[:-1]] == [zone.from_m for zone in zones[1:]]


def test_a_step_of_velocity_is_told_where_it_is() -> None:
    section = made_section(layers=1)
    velocity = np.full_like(section.velocity_samples_m_s, 2000.0)
    velocity[:, 1, 10:] = 3000.0
    zones = velocity_zones(dataclasses.replace(section, velocity_samples_m_s=velocity))
    # stations stand every 5 m: the step lies between 45 and 50 m
    assert [(zone.layer, zone.from_m, zone.to_m) for zone in zones] == [
        (1, 0.0, 115.0),
        (2, 0.0, 47.5),
        (2, 47.5, 115.0),
    ]
    # the harmonic mean of equal values differs from them by rounding only
    assert [zone.velocity_m_s for zone in zones] == pytest.approx([2000.0, 2000.0, 3000.0], rel=1e-12)


def test_a_zone_velocity_is_the_length_over_the_time_along_it() -> None:
    """Harmonic mean: equal lengths at 1000 and 3000 m/s take as long as both at 1500 m/s (definition of mean speed)."""
    section = made_section(layers=1, stations=18)
    ramp = np.where(np.arange(18) % 2 == 0, 1000.0, 3000.0)
    velocity = np.broadcast_to(ramp, section.velocity_samples_m_s.shape).copy()
    middle = velocity_zones(dataclasses.replace(section, velocity_samples_m_s=velocity))[1]
    assert middle.velocity_m_s == pytest.approx(1500.0, rel=1e-12)  # only rounding may differ


def test_set_aside_picks_do_not_count_towards_a_velocity() -> None:
    section = made_section(layers=1)
    believed = sum(zone.picks for zone in velocity_zones(section) if zone.layer == 1)
    fit = section.fit
    near = np.minimum(fit.source_along_m, fit.receiver_along_m)
    far = np.maximum(fit.source_along_m, fit.receiver_along_m)
    # from a shot beyond an end to the geophone at that end the wave does not run under the line (0 to 115 m) at all
    assert believed == np.count_nonzero((fit.branch == 0) & (fit.weight > 0.5) & (far > 0) & (near < 115))
    assert believed < np.count_nonzero(fit.branch == 0)


def test_a_layer_without_picks_says_where_its_velocity_comes_from() -> None:
    section = made_section(layers=1)
    fit = dataclasses.replace(section.fit, branch=np.ones_like(section.fit.branch))
    zone = velocity_zones(dataclasses.replace(section, fit=fit))[0]
    assert zone.picks == 0
    assert "no pick" in zone.note


@pytest.mark.parametrize("layers", [1, 2])
def test_section_json_reads_back_equal(layers: int) -> None:
    section = made_section(layers=layers)
    assert same(section_from_json(section_to_json(section)), rounded(section))


def test_section_json_gives_the_same_bytes_again_after_reading() -> None:
    text = section_to_json(made_section())
    assert section_to_json(section_from_json(text)) == text


def test_section_json_is_strict_json_with_a_schema_and_a_version() -> None:
    def refuse(constant: str) -> float:
        raise AssertionError(f"{constant} is not JSON")

    document = json.loads(section_to_json(made_section()), parse_constant=refuse)
    assert (document["schema"], document["version"]) == ("rockhead-section", 1)
    assert document["depth_samples_m"][0][1][-1] is None


def test_a_section_without_refractors_reads_back_equal() -> None:
    section = made_section(layers=1)
    bare = dataclasses.replace(
        section,
        depth_samples_m=section.depth_samples_m[:, :0],
        velocity_samples_m_s=section.velocity_samples_m_s[:, :1],
        **{
            name: getattr(section, name)[:0]
            for name in ("bound_shallow_m", "bound_deep_m", "coverage", "deeper_than_m", "picks", "note")
        },
        bounds=(),
    )
    assert same(section_from_json(section_to_json(bare)), rounded(bare))
    assert to_csv(depth_columns(bare)) == DEPTHS + "\n"


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("{", "not JSON"),
        ("[1]", "expected schema 'rockhead-section', found 'list'"),
        ('{"schema": "other"}', "found 'other'"),
        ('{"schema": "rockhead-section", "version": 99}', "expected 1, found 99"),
        ('{"schema": "rockhead-section", "version": 1}', "'layers' is missing"),
    ],
)
def test_what_is_not_a_section_is_refused_and_the_file_named(tmp_path, text: str, message: str) -> None:  # type: ignore[no-untyped-def]
    path = tmp_path / "section.json"
    path.write_text(text)
    with pytest.raises(InputError, match=r"section\.json") as refusal:
        read_section_json(path)
    assert message in str(refusal.value)


def test_parts_that_do_not_fit_together_are_refused() -> None:
    document = json.loads(section_to_json(made_section()))
    document["picks"] = document["picks"][:1]
    with pytest.raises(InputError, match=r"picks: expected shape \(2, 24\), found \(1, 24\)"):
        section_from_json(json.dumps(document))
