"""The report says what the tables say, hides nothing that is missing, and is safe to open."""

from __future__ import annotations

import base64
import dataclasses
import re
from collections.abc import Iterator
from html.parser import HTMLParser
from pathlib import Path

import numpy as np
import pytest
from made_section import SHOTS_M, made_picks, made_record, made_section
from test_figures import unseen, without_refractors

import interp.report
from interp.plane_pairs import plane_pairs
from interp.report import ReportContent, shown_gathers, write_report
from interp.report_text import answer, missing_errors
from interp.section import DepthSection
from interp.section_tables import cells, depth_columns, velocity_columns
from picker.findings import Finding
from picker.log import LogEntry
from picker.picks import PickTable
from picker.records import ShotRecord
from picker.units import columns_in

FOOT_M = 0.3048  # the international foot, exact
HOSTILE = "<script>alert('1')</script> & \"quoted\" {{ 7 * 7 }}"


def entry(reason: str, kind: str = "override") -> LogEntry:
    before = {"pick": {"time_s": 0.0172, "sigma_s": 0.0003, "state": "kept", "origin": "auto"}}
    after = {"pick": {"time_s": 0.0165, "sigma_s": 0.0006, "state": "kept", "origin": "manual"}}
    return LogEntry(7, "2026-11-30T10:00:00Z", 3, kind, 6, 20, before, after, reason, None)


def content_of(section: DepthSection, **changes: object) -> ReportContent:
    picks = made_picks(section)
    content = ReportContent(
        title="Mill Lane, line 1",
        section=section,
        picks=picks,
        records=lambda: (made_record(picks, number) for number in range(1, len(SHOTS_M) + 1)),
        log=(entry("a car passed"),),
        files=(("mill_lane_01.sgy", "ab" * 32),),
        findings=(Finding("look", "A shot stands off the line.", record=2), Finding("note", "The header is in feet.")),
        created="2026-12-01",
    )
    return dataclasses.replace(content, **changes)  # type: ignore[arg-type]


class Page(HTMLParser):
    """The page as a reader sees it: words, tables by their first header cell, pictures and every address in it."""

    def __init__(self, html: str) -> None:
        super().__init__()
        self.words, self.tags, self.addresses = "", [], []
        self.tables: list[list[list[str]]] = []
        self.pictures: list[bytes] = []
        self._cell = False
        self.feed(html)

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append(tag)
        values = dict(attrs)
        self.addresses += [values[name] or "" for name in ("href", "src") if name in values]
        if tag == "img":
            self.pictures.append(base64.b64decode((values["src"] or "").partition("base64,")[2]))
        if tag == "table":
            self.tables.append([])
        if tag == "tr":
            self.tables[-1].append([])
        if tag in ("td", "th"):
            self.tables[-1][-1].append("")
            self._cell = True

    def handle_endtag(self, tag: str) -> None:
        if tag in ("td", "th"):
            self._cell = False

    def handle_data(self, data: str) -> None:
        self.words += data
        if self._cell:
            self.tables[-1][-1][-1] += data

    def table(self, *first_headers: str) -> dict[str, list[str]]:
        """Columns of the table whose header begins so, by name; a name that repeats keeps its first column."""
        (rows,) = (rows for rows in self.tables if rows[0][: len(first_headers)] == list(first_headers))
        return {name: [row[rows[0].index(name)] for row in rows[1:]] for name in rows[0]}


def page_of(path: Path) -> Page:
    return Page(path.read_text(encoding="utf-8"))


@pytest.fixture(scope="module")
def section() -> DepthSection:
    return made_section()


@pytest.fixture(scope="module")
def report(section: DepthSection, tmp_path_factory: pytest.TempPathFactory) -> Path:
    return write_report(tmp_path_factory.mktemp("report"), content_of(section))


@pytest.mark.parametrize("units", ["m", "ft"])
def test_every_depth_and_velocity_of_the_page_is_that_of_the_csv_tables(section, tmp_path, units):
    page = page_of(write_report(tmp_path, content_of(section, records=None), units))
    shown = cells(columns_in(units, depth_columns(section)))
    told = page.table(f"x ({units})", f"y ({units})")
    for header, name in (
        (f"x ({units})", f"x_{units}"),
        (f"along ({units})", f"along_{units}"),
        (f"ground ({units})", f"surface_z_{units}"),
        ("layer", "layer"),
        ("90 % from", f"depth_lo_{units}"),
        ("to", f"depth_hi_{units}"),
        ("bound from", f"bound_shallow_{units}"),
        ("bound to", f"bound_deep_{units}"),
        (f"velocity above ({units}/s)", f"velocity_above_{units}_s"),
        (f"below ({units}/s)", f"velocity_below_{units}_s"),
        ("coverage", "coverage"),
        ("picks", "picks"),
    ):
        assert told[header] == shown[name], header
    depth, least = shown[f"depth_{units}"], shown[f"deeper_than_{units}"]
    assert told[f"depth ({units})"] == [one or f"> {other}" for one, other in zip(depth, least, strict=True)]
    assert len(depth) == section.layers * section.along_m.size
    velocities = cells(columns_in(units, velocity_columns(section)))
    told = page.table("layer", f"from ({units})")
    assert told[f"velocity ({units}/s)"] == velocities[f"velocity_{units}_s"]
    assert told["90 % from"] == velocities[f"velocity_lo_{units}_s"]
    assert told["to"] == velocities[f"velocity_hi_{units}_s"]


def test_elevation_of_a_refractor_is_ground_less_depth(report):
    told = page_of(report).table("x (m)", "y (m)")
    for ground, depth, elevation in zip(told["ground (m)"], told["depth (m)"], told["elevation (m)"], strict=True):
        if elevation:
            # three numbers rounded to centimetres each
            assert float(ground) - float(depth) == pytest.approx(float(elevation), abs=0.0151)


def test_the_answer_comes_first_with_the_numbers_of_the_table(section, report):
    shown = cells(depth_columns(section))
    told = answer(section, "m")
    depth = np.array([float(value or "nan") for value in shown["depth_m"]])
    for layer in (1, 2):
        rows = [row for row, value in enumerate(shown["layer"]) if value == str(layer)]
        for choose in (np.nanargmin, np.nanargmax):
            # rounding to centimetres may tie neighbours: any of them is the extreme point
            extreme = depth[rows][choose(depth[rows])]
            tied = [row for row in rows if depth[row] == extreme]
            words = [
                f"{shown['depth_lo_m'][row]} to {shown['depth_hi_m'][row]}) at {shown['along_m'][row]} m"
                for row in tied
            ]
            assert any(one in told[layer - 1] for one in words)
    page = page_of(report)
    assert page.words.index(told[0]) < page.words.index("Section")
    for sentence in told:
        assert sentence in page.words


def test_warnings_and_weak_points_stand_before_the_section(section, report):
    words = page_of(report).words
    for sentence in (
        *section.warnings,
        "record 2: A shot stands off the line.",
        "Refractor 2 is seen from one side only under 4 geophones (0.00 to 15.00 m along the line).",
        "Refractor 2 has no depth, for want of arrivals that bear on it, under 3 geophones (105.00 to 115.00 m along",
    ):
        assert sentence in words[: words.index("Above, elevations")]
    assert "The header is in feet." in words


def test_nothing_from_outside_is_fetched_or_run(report):
    page = page_of(report)
    assert "script" not in page.tags
    assert {"link", "iframe", "object", "form"}.isdisjoint(page.tags)
    assert all(address.startswith(("#", "data:image/png;base64,")) for address in page.addresses)
    assert "http" not in re.sub(r"base64,[A-Za-z0-9+/=]+", "", report.read_text(encoding="utf-8")).replace(
        "http-equiv", ""
    )


def test_everything_from_files_and_people_is_escaped_and_yet_readable(section, tmp_path):
    picks = made_picks(section)
    notes = picks.note.astype("<U80")
    notes[3] = HOSTILE
    content = content_of(
        dataclasses.replace(section, warnings=(HOSTILE,)),
        title=HOSTILE,
        picks=dataclasses.replace(picks, note=notes),
        log=(entry(HOSTILE),),
        files=((HOSTILE, HOSTILE),),
        findings=(Finding("look", HOSTILE, HOSTILE, file=HOSTILE), Finding("note", HOSTILE)),
        created=HOSTILE,
        records=None,
    )
    path = write_report(tmp_path, content)
    page = page_of(path)
    assert "script" not in page.tags
    assert "<script" not in path.read_text(encoding="utf-8")
    # title twice, date, warning, two findings (one with proposal, file name after the last slash), note, reason, file
    assert page.words.count(HOSTILE) >= 9
    assert page.table("time (UTC)")["reason"] == [HOSTILE]
    assert HOSTILE in page.table("picks", "note")["note"]


def test_the_same_content_gives_the_same_bytes(section, report, tmp_path):
    again = write_report(tmp_path, content_of(section))
    assert again.read_bytes() == report.read_bytes()
    names = sorted(path.name for path in (report.parent / "figures").iterdir())
    assert names == sorted(path.name for path in (tmp_path / "figures").iterdir())
    for name in names:
        assert (tmp_path / "figures" / name).read_bytes() == (report.parent / "figures" / name).read_bytes()


def test_figures_on_disk_are_those_of_the_page(report):
    names = ["section", "travel_times", "pick_quality", *(f"gather_{n:04d}" for n in range(1, len(SHOTS_M) + 1))]
    assert sorted(path.name for path in (report.parent / "figures").iterdir()) == sorted(f"{n}.png" for n in names)
    on_disk = [(report.parent / "figures" / f"{name}.png").read_bytes() for name in names]
    assert sorted(page_of(report).pictures) == sorted(on_disk)
    assert report.stat().st_size < 5_000_000


def test_bounds_that_were_not_computed_are_said_to_be_missing(section, tmp_path):
    none = np.full_like(section.bound_deep_m, np.nan)
    bare = dataclasses.replace(section, bound_shallow_m=none, bound_deep_m=none, bounds=())
    words = page_of(write_report(tmp_path, content_of(bare, records=None))).words
    assert "No bounds were computed on any of the following." in words
    assert "bound from" not in words
    for unknown in ("hidden layer", "velocity inversion", "Structure against velocity", "Rays from the side"):
        assert unknown in words


def test_bounds_that_were_computed_are_named_apart_from_the_intervals(report):
    words = page_of(report).words
    assert "Bounds were computed for: hidden layer." in words
    assert "No bounds were computed" not in words


def test_cautions_say_that_borings_are_not_replaced(report):
    words = page_of(report).words
    assert "never replace borings" in words
    for use in ("Excavation", "Foundations", "Water"):
        assert f"{use}:" in words


def bare_picks(section: DepthSection) -> PickTable:
    """Picks as another program hands them in: times and one standard error, nothing else."""
    picks = made_picks(section)
    nothing = np.full(len(picks), np.nan)
    return dataclasses.replace(
        picks,
        sigma_s=np.where(picks.kept, 0.001, picks.sigma_s),
        early_s=nothing,
        late_s=nothing,
        reading_sigma_s=nothing,
        bias_removed_s=nothing,
        time_break_sigma_s=nothing,
        geophone_sigma_s=nothing,
        confidence=nothing,
        origin=np.full(len(picks), "manual"),
        note=np.where(picks.kept, "no error given: 1 ms assumed", ""),
    )


def test_errors_that_picks_came_without_are_told_one_by_one(section, tmp_path):
    picks = bare_picks(section)
    kept = int(picks.kept.sum())
    told = missing_errors(picks)
    for words in (
        "standard error; it was assumed",
        "time breaks were taken as exact",
        "shared by all picks at a geophone",
    ):
        assert any(sentence.startswith(f"{kept} of {kept} kept picks") and words in sentence for sentence in told)
    assert sum("late bias" in sentence for sentence in told) == 1
    page = page_of(write_report(tmp_path, content_of(section, picks=picks, records=None, log=(entry("", "import"),))))
    for sentence in told:
        assert sentence in page.words
    assert page.table("picks", "note")["note"] == ["no error given: 1 ms assumed"]
    assert "the picks were handed in; they were not made here" in page.words
    assert "There are none: the picks came without shot records." in page.words


def test_picks_with_all_their_errors_are_said_to_have_them(section, tmp_path):
    picks = made_picks(section)
    auto = dataclasses.replace(picks, origin=np.full(len(picks), "auto"))
    assert missing_errors(auto) == []
    assert missing_errors(picks) == [
        f"1 of {picks.kept.sum()} kept picks were placed by hand; no late bias was taken off them, and the intervals "
        "do not hold the lateness of a reading by eye."
    ]


def test_changes_by_hand_stand_with_old_value_new_value_and_reason(report):
    told = page_of(report).table("time (UTC)")
    assert {name: cell for name, (cell,) in told.items()} == {
        "time (UTC)": "2026-11-30T10:00:00Z",
        "change": "override",
        "record": "6",
        "channel": "20",
        "before": "17.20 ms \u00b1 0.30 ms kept",
        "after": "16.50 ms \u00b1 0.60 ms kept",
        "reason": "a car passed",
    }


def test_what_the_program_did_itself_is_no_change_by_hand(section, tmp_path):
    own = tuple(entry("", kind) for kind in ("load", "pick", "interpret"))
    words = page_of(write_report(tmp_path, content_of(section, log=own, records=None))).words
    assert "No pick was changed by hand." in words


def test_records_table_counts_states_and_tells_shifts(section, report):
    picks = made_picks(section)
    told = page_of(report).table("record", "shot x (m)")
    for row, record in enumerate(told["record"]):
        mine = picks.record == int(record)
        for state in ("kept", "dropped", "none"):
            assert int(told[state][row]) == np.sum(mine & (picks.state == state))
        middle, error = section.shot_shift_s[int(record)]
        assert told["time-break shift (ms)"][row] == f"{1e3 * middle:.2f} \u00b1 {1e3 * error:.2f}"


def test_plane_layer_check_stands_beside_the_section_in_its_units(tmp_path):
    one = made_section(layers=1, gap=False)
    pairs = plane_pairs(one)
    depths = cells(columns_in("ft", depth_columns(one)))
    page = page_of(write_report(tmp_path, content_of(one, records=None), "ft"))
    told = page.table("records", "shots at (ft)")
    assert told["records"] == [f"{pair.record_a}, {pair.record_b}" for pair in pairs]
    for row, pair in enumerate(pairs):
        layers = pair.layers.at_a
        velocity, error = layers.velocity_m_s[1] / FOOT_M, layers.velocity_sigma_m_s[1] / FOOT_M
        assert told["below (ft/s)"][row] == f"{velocity:.0f} \u00b1 {error:.0f}"
        depth, error = layers.depth_m[0] / FOOT_M, layers.depth_sigma_m[0] / FOOT_M
        assert told["depth at first shot (ft)"][row] == f"{depth:.2f} \u00b1 {error:.2f}"
        nearest = int(np.argmin(np.abs(one.along_m - pair.along_a_m)))
        assert told["section there"][row] == depths["depth_ft"][nearest]
    assert "It is a check, not a result" in page.words


def test_settings_seed_and_checksums_are_there(report):
    page = page_of(report)
    told = page.table("setting")
    assert dict(zip(told["setting"], told["value"], strict=True)) == {"seed": "1", "draws": "200"}
    assert page.table("file")["SHA-256"] == ["ab" * 32]


def test_sources_are_those_that_the_method_names(report):
    words = page_of(report).words
    method, sources = words[words.index("\nMethod\n") :].split("\nSources\n")
    for author in re.findall(r"([A-Z]\w+)(?:, \w+)*(?: and \w+)? (?:19|20)\d\d", method):
        assert author in sources, author


def test_a_refractor_that_was_seen_nowhere_is_said_to_be_deeper_than_told(section, tmp_path):
    bare = unseen(made_section(layers=1, gap=False))
    page = page_of(write_report(tmp_path, content_of(bare, records=None)))
    assert (
        "The refractor was not seen in first arrivals. If there is one, it is deeper than told under each geophone: "
        "than 4.00 to 9.00 m." in page.words
    )
    assert all(cell.startswith("> ") for cell in page.table("x (m)")["depth (m)"])


def test_ground_without_any_refractor_makes_a_report(section, tmp_path):
    page = page_of(write_report(tmp_path, content_of(without_refractors(section), records=None)))
    assert "No refractor was seen in first arrivals." in page.words
    assert "The velocity of the ground is" in page.words


def test_of_many_records_one_a_shot_place_is_shown_and_all_are_drawn(section, tmp_path, monkeypatch):
    monkeypatch.setattr(interp.report, "MOST_GATHERS", 3)
    drawn = []
    path = write_report(tmp_path, content_of(section), progress=lambda done, total: drawn.append((done, total)))
    page = page_of(path)
    assert len(page.pictures) == 3 + 3
    assert "Of 7 records these are shown here: 1, 4, 7." in page.words
    assert len(list((tmp_path / "figures").glob("gather_*.png"))) == 7
    assert drawn == [(number, 7) for number in range(1, 8)]


def test_of_repeated_shots_the_one_with_most_picks_is_shown(section):
    picks = made_picks(section)
    count = interp.report.MOST_GATHERS // len(SHOTS_M) + 1
    state = np.tile(picks.state, count)
    record = np.concatenate([picks.record + repeat * len(SHOTS_M) for repeat in range(count)])
    worse = record <= (count - 1) * len(SHOTS_M)
    state[worse & (np.arange(record.size) % 3 == 0)] = "none"
    repeated = PickTable(
        **{
            field.name: np.concatenate([getattr(picks, field.name)] * count)
            for field in dataclasses.fields(picks)
            if field.name not in ("record", "state")
        },
        record=record,
        state=state,
    )
    assert shown_gathers(repeated) == frozenset(range((count - 1) * len(SHOTS_M) + 1, count * len(SHOTS_M) + 1))


def test_records_are_taken_one_by_one(section, tmp_path):
    picks = made_picks(section)
    figures = tmp_path / "figures"

    def records() -> Iterator[ShotRecord]:
        for number in (1, 2, 3):
            assert len(list(figures.glob("gather_*.png"))) == number - 1, "the one before is drawn already"
            yield made_record(picks, number)

    write_report(tmp_path, content_of(section, records=records))


def test_gathers_of_an_earlier_report_are_taken_away_and_nothing_else(section, tmp_path):
    picks = made_picks(section)
    write_report(tmp_path, content_of(section, records=lambda: (made_record(picks, number) for number in (1, 2))))
    (tmp_path / "figures" / "sketch.png").write_bytes(b"a person's own")
    write_report(tmp_path, content_of(section, records=lambda: (made_record(picks, number) for number in (2,))))
    assert sorted(path.name for path in (tmp_path / "figures").iterdir()) == [
        "gather_0002.png",
        "pick_quality.png",
        "section.png",
        "sketch.png",
        "travel_times.png",
    ]


def test_a_report_that_cannot_be_finished_leaves_the_one_before(section, tmp_path):
    path = write_report(tmp_path, content_of(section, records=None))
    before = path.read_bytes()

    def records() -> Iterator[ShotRecord]:
        yield made_record(made_picks(section), 1)
        raise OSError("the disk was taken away")

    with pytest.raises(OSError, match="taken away"):
        write_report(tmp_path, content_of(section, records=records, title="Another"))
    assert path.read_bytes() == before
