"""The demo's night: what it holds, that its bytes are fixed, and that its files read back as simulated."""

import io
import tomllib
import zipfile
from collections import Counter
from datetime import UTC
from zoneinfo import ZoneInfo

import numpy as np
import pytest

from flows.demo import write_demo
from flows.demo.exports import PlateRead, write_export
from flows.demo.night import SCENARIO, night_files
from flows.demo.scenario import Scenario, design_plate, read_scenario, simulate
from flows.demo.workbook import workbook
from flows.site.configuration import load_configuration
from flows.site.layout import create_site, open_site
from flows.site.shipped import shipped
from flows.stages.read import choose_profile, is_plate_map, read_export, read_plate_map
from models.errors import ConfigurationError, ExportError, SiteError, UnknownName

HALL_CLOCK = ZoneInfo("Europe/Copenhagen")


@pytest.fixture(scope="module")
def scenario() -> Scenario:
    return read_scenario(shipped(SCENARIO) / "scenario.toml")


@pytest.fixture(scope="module")
def files(scenario):
    return night_files(scenario)


@pytest.fixture(scope="module")
def configuration():
    return load_configuration(shipped(SCENARIO) / "config")


def whole_exports(scenario):
    return [entry for entry in scenario.exports if entry.torn_at is None]


def test_the_night_holds_what_a_demo_must_show(scenario, configuration):
    whole = whole_exports(scenario)
    plates = [plate_id for entry in whole for plate_id in entry.plates]
    assert len(plates) == len(set(plates)) >= 12
    assert {scenario.dialects[entry.dialect].shape for entry in whole} == {
        "long",
        "wide",
        "wells_by_rows",
        "grids",
    }
    assert {scenario.benches[scenario.plate(p).assay].well_count for p in plates} == {96, 384}
    assert {lot.law for lot in scenario.lots.values()} == {"michaelis_menten", "hill"}
    kinds = {fault["kind"] for plate in scenario.plates for fault in plate.faults}
    assert {"drifting_blank", "depletion", "lag", "burst", "overflow"} <= kinds
    assert any(entry.torn_at for entry in scenario.exports)
    assert any(len(entry.plates) > 1 for entry in scenario.maps)
    assert set(configuration.profiles) == set(scenario.dialects)
    assert set(configuration.assays) == set(scenario.benches)


def test_every_plate_has_a_reference_lot_and_blanks_at_each_level(scenario):
    for plate in scenario.plates:
        wells = design_plate(scenario, plate).wells
        levels = set(wells["substrate_um"])
        for role in ("reference", "sample", "blank"):
            assert set(wells.loc[wells["role"] == role, "substrate_um"]) == levels, (plate.plate_id, role)
        assert set(wells.loc[wells["role"] == "reference", "lot"]) == {plate.lots[0]}
        assert all(scenario.lots[lot].assay == plate.assay for lot in plate.lots)


def test_every_lot_is_read_on_three_plates(scenario):
    """With two plates the interval of a lot rests on one degree of freedom."""
    read = Counter(lot for e in whole_exports(scenario) for p in e.plates for lot in scenario.plate(p).lots)
    assert set(read) == set(scenario.lots)
    assert min(read.values()) >= 3


def test_one_lot_is_slow_and_one_is_not_saturated(scenario):
    reference = scenario.lots["R-AP-07"]
    assert scenario.lots["AP-2602"].kcat_per_s < 0.8 * reference.kcat_per_s
    highest = max(scenario.benches["alkaline_phosphatase"].levels_um)
    # 3 K, or 75 % of Vmax, is the gate's limit for saturation.
    assert highest < 2 * scenario.lots["AP-2603"].k_um
    assert highest > 3 * reference.k_um


def test_most_wells_are_struck_by_nothing_that_would_hold_them(scenario):
    struck = Counter()
    for plate in scenario.plates:
        faults = simulate(scenario, plate.plate_id).truth["faults"]
        struck["wells"] += len(faults)
        struck["faulty"] += int(((faults != "") & (faults != "drifting_blank")).sum())
    assert 15 <= struck["faulty"] <= 60
    assert struck["wells"] > 1500


def test_assay_and_bench_agree_on_signal_and_schedule(scenario, configuration):
    for name, bench in scenario.benches.items():
        assay = configuration.assays[name]
        sign = 1 if assay.signal.direction == "rises" else -1
        proportional = assay.absorption or assay.response
        assert proportional is not None
        assert bench.signal_per_um == pytest.approx(sign * proportional.signal_per_um, rel=1e-4)
        assert (assay.schedule.read_count, assay.schedule.interval_s) == (bench.read_count, bench.interval_s)
        assert assay.conditions.temperature_c == bench.temperature_c


def test_the_same_scenario_gives_the_same_bytes(scenario, files):
    assert night_files(scenario) == files


def test_workbooks_carry_no_clock():
    content = workbook([("One", [["a", 1], ["", 2]])])
    assert content == workbook([("One", [["a", 1], ["", 2]])])
    with zipfile.ZipFile(io.BytesIO(content)) as archive:
        assert {entry.date_time for entry in archive.infolist()} == {(1980, 1, 1, 0, 0, 0)}
        properties = archive.read("docProps/core.xml").decode()
    assert properties.count("1980-01-01T00:00:00Z") == 2


@pytest.mark.parametrize(
    "name",
    [
        entry["name"]
        for entry in tomllib.loads((shipped(SCENARIO) / "scenario.toml").read_text(encoding="utf-8"))[
            "exports"
        ]
        if "torn_at" not in entry
    ],
)
def test_an_export_reads_back_as_simulated(name, scenario, files, configuration):
    entry = next(e for e in scenario.exports if e.name == name)
    assert not is_plate_map(files[name], name)
    profile = choose_profile(files[name], name, configuration.profiles)
    assert profile == entry.dialect
    dialect = scenario.dialects[entry.dialect]
    reads = read_export(files[name], name, configuration.profiles[profile])
    assert [read.plate_id for read in reads] == list(entry.plates)
    for read in reads:
        plate, simulated = scenario.plate(read.plate_id), simulate(scenario, read.plate_id)
        assay = configuration.assays[plate.assay]
        assert read.plate_format == scenario.benches[plate.assay].well_count
        assert read.started_at == plate.started_at.replace(tzinfo=HALL_CLOCK).astimezone(UTC)
        readings = read.readings[read.readings["channel"] == assay.signal.channel]
        signal = readings.pivot(index="well", columns="read_number", values="signal").loc[
            simulated.wells["well"]
        ]
        state = readings.pivot(index="well", columns="read_number", values="state").loc[
            simulated.wells["well"]
        ]
        expected = np.where(np.isfinite(simulated.signal), simulated.signal, np.nan)
        np.testing.assert_allclose(signal.to_numpy(float), expected, atol=0.5000001 * 10.0**-dialect.decimals)
        np.testing.assert_array_equal(state == "overflow", np.isposinf(simulated.signal))
        np.testing.assert_array_equal(state == "missing", np.isnan(simulated.signal))
        times = readings.groupby("read_number")["time_s"].agg(["min", "max"])
        # Minutes are written with four digits: 0.003 s.
        np.testing.assert_allclose(times["min"], simulated.time_s, atol=0.0031)
        np.testing.assert_allclose(times["max"], simulated.time_s, atol=0.0031)
        if dialect.temperature:
            np.testing.assert_allclose(readings["temperature_c"], simulated.temperature_c[0], atol=0.11)


def test_the_tower_writes_its_second_channel_too(files, configuration):
    (read,) = read_export(files["tower_0031.csv"], "tower_0031.csv", configuration.profiles["tower"])
    assert set(read.readings["channel"]) == {"340", "600"}


def test_the_torn_file_cannot_be_read(scenario, files, configuration):
    (entry,) = (e for e in scenario.exports if e.torn_at is not None)
    profile = choose_profile(files[entry.name], entry.name, configuration.profiles)
    with pytest.raises(ExportError, match=entry.name):
        read_export(files[entry.name], entry.name, configuration.profiles[profile])


def test_plate_maps_read_back_as_planned(scenario, files):
    for entry in scenario.maps:
        assert is_plate_map(files[entry.name], entry.name)
        maps = {plate_map.plate_id: plate_map for plate_map in read_plate_map(files[entry.name], entry.name)}
        assert set(maps) == set(entry.plates)
        for plate_id, plate_map in maps.items():
            plate = scenario.plate(plate_id)
            planned = design_plate(scenario, plate).wells.set_index("well")
            read = plate_map.wells.set_index("well").loc[planned.index]
            assert plate_map.assay == plate.assay
            assert read["role"].tolist() == planned["role"].tolist()
            assert read["lot"].tolist() == planned["lot"].tolist()
            for column in ("substrate_um", "enzyme_nm", "enzyme_ng_per_ml"):
                np.testing.assert_allclose(
                    read[column].to_numpy(float), planned[column].to_numpy(float), rtol=1e-9
                )


def test_the_demo_makes_a_site_with_a_full_inbox_and_may_fill_it_again(tmp_path, files):
    write_demo(tmp_path / "demo")
    site = open_site(tmp_path / "demo")
    assert {path.name: path.read_bytes() for path in site.inbox.iterdir()} == files
    (site.inbox / "tower_0031.csv").unlink()
    write_demo(tmp_path / "demo")
    assert {path.name: path.read_bytes() for path in site.inbox.iterdir()} == files


def test_the_demo_leaves_another_site_alone(tmp_path):
    other = create_site(tmp_path / "other", shipped(SCENARIO) / "config")
    (other.config / "site.toml").write_text('name = "somebody else"', encoding="utf-8")
    with pytest.raises(SiteError, match="there is a site already"):
        write_demo(other.root)
    assert not list(other.inbox.iterdir())


def test_only_the_long_shape_holds_several_plates(scenario):
    plate = scenario.plate("SW104403")
    read = PlateRead(plate.plate_id, 96, plate.started_at, simulate(scenario, plate.plate_id))
    with pytest.raises(ValueError, match="holds one plate"):
        write_export(scenario.dialects["old_hall"], [read, read])


def test_a_scenario_with_a_mistake_is_refused(scenario, tmp_path):
    with pytest.raises(UnknownName, match="SW000000"):
        scenario.plate("SW000000")
    text = (shipped(SCENARIO) / "scenario.toml").read_text(encoding="utf-8")
    (tmp_path / "scenario.toml").write_text(text.replace('kind = "burst"', 'kind = "bust"'), encoding="utf-8")
    with pytest.raises(UnknownName, match="'bust' is no fault"):
        night_files(read_scenario(tmp_path / "scenario.toml"))
    (tmp_path / "scenario.toml").write_text("seed = 'x'", encoding="utf-8")
    with pytest.raises(ConfigurationError, match=r"scenario\.toml"):
        read_scenario(tmp_path / "scenario.toml")


def test_a_part_that_does_not_ship_is_an_error():
    with pytest.raises(SiteError, match="fixtures/nothing"):
        shipped("fixtures/nothing")


def test_an_installed_package_finds_its_own_parts_and_not_its_neighbours(tmp_path, monkeypatch):
    installed = tmp_path / "flows"
    monkeypatch.setattr("flows.site.shipped._FLOWS", installed)
    (tmp_path / "config").mkdir()
    with pytest.raises(SiteError, match="'config' does not ship"):
        shipped("config")
    (installed / "shipped" / "config").mkdir(parents=True)
    assert shipped("config") == installed / "shipped" / "config"
