"""Jobs with terminations over frequency, damage, antennas as built and mixed designs: what is solved, what is not, and beams."""

import contextlib

import numpy as np
import pytest

from elbowroom.base.errors import ElbowroomError, JobFileError, ModelRangeError
from elbowroom.geometry.directions import hemisphere_grid
from elbowroom.geometry.stations import PortName, Station
from elbowroom.job import solve as solve_module
from elbowroom.job.beamfields import beam_fields, beam_weights
from elbowroom.job.jobfile import read_job
from elbowroom.job.pipeline import JobRun
from elbowroom.job.solve import solve
from elbowroom.system.terminations import ParallelCircuit, SampledReflection, SeriesCircuit

SKY = hemisphere_grid(30.0)
CROSS = 'shape = "crossed-dipoles"\narm_length_m = 0.6\nheight_m = 0.9\nwire_radius_m = 0.003\nseparation_m = 0.04\n'
SINGLE = "[[wire]]\nstart_m = [-0.4, 0, 1]\nend_m = [0.4, 0, 1]\nradius_m = 0.004\n[[port]]\nname = 'x'\nwire = 0\n"
JOB = """
[station]
layout = "layout.csv"
antenna = "cross.toml"
# as-built
[station.antennas]
single = "single.toml"
# damage
[band]
frequency_hz = [80e6, 120e6]
[solver]
method = "direct"
[termination]
# termination
[[beam]]
name = "all"
port = "x"
zenith_angle_deg = 20
[[beam]]
name = "some"
port = "x"
antennas = ["A1", "A2"]
"""
LNA = "# MHz S RI R 50\n50 0.2 0.1\n100 0.3 -0.1\n200 0.1 -0.4\n"


@pytest.fixture
def folder(tmp_path):
    (tmp_path / "cross.toml").write_text(CROSS)
    (tmp_path / "single.toml").write_text(SINGLE)
    (tmp_path / "lna.s1p").write_text(LNA)
    (tmp_path / "layout.csv").write_text("name,east_m,north_m,antenna\nA1,0,0,\nA2,1.7,0.3,\nB1,-0.5,1.8,single\n")
    return tmp_path


def job_of(folder, damage="", termination="", as_built=""):
    text = JOB.replace("# damage", damage).replace("# termination", termination).replace("# as-built", as_built)
    (folder / "job.toml").write_text(text)
    return read_job(folder / "job.toml")


def faults(folder, **parts):
    with pytest.raises(JobFileError) as caught:
        job_of(folder, **parts)
    return caught.value.problems


@pytest.fixture
def solves(monkeypatch):
    calls = []
    original = solve_module.solve_direct

    def counted(*args, **kwargs):
        calls.append(1)
        return original(*args, **kwargs)

    monkeypatch.setattr(solve_module, "solve_direct", counted)
    return calls


TERMINATIONS = """
file = "lna.s1p"
amplifier_off = { circuit = "series", resistance_ohm = 20, capacitance_f = 3e-12 }
[termination.antennas]
A2 = { circuit = "parallel", resistance_ohm = 200, inductance_h = 1e-7, capacitance_f = 2e-12 }
B1 = [30, 5]
[termination.ports]
"A1/y" = "open"
"A2/y" = { impedance_ohm = 75 }
"""


def test_terminations__port_before_antenna_before_all(folder):
    job = job_of(folder, termination=TERMINATIONS)
    sampled = job.terminations.every
    assert isinstance(sampled, SampledReflection)
    circuit = ParallelCircuit(200.0, 1e-7, 2e-12)
    assert job.port_terminations() == [sampled, "open", circuit, 75.0, 30 + 5j]
    assert job.terminations.amplifier_off == SeriesCircuit(20.0, 0.0, 3e-12)
    run = JobRun(job)
    for frequency in run.frequencies_hz:
        share = (frequency - 50e6) / 50e6 if frequency < 100e6 else (frequency - 100e6) / 100e6
        low, high = (0.2 + 0.1j, 0.3 - 0.1j) if frequency < 100e6 else (0.3 - 0.1j, 0.1 - 0.4j)
        reflection = low + share * (high - low)
        omega = 2 * np.pi * frequency
        expected = [
            50 * (1 + reflection) / (1 - reflection), 1 / (1 / 200 + 1 / (1j * omega * 1e-7) + 1j * omega * 2e-12), 75.0, 30 + 5j,
        ]  # fmt: skip
        found = run.termination_at(frequency)
        assert found[1] == "open"
        np.testing.assert_allclose(np.array([found[0], *found[2:]]), expected, rtol=1e-13)
    lines = job.resolved_lines()
    for expected in (
        "termination = lna.s1p (50 to 200 MHz, 3 samples)",
        "termination.antennas.A2 = 200 ohm + 1e-07 H + 2e-12 F in parallel",
        "termination.antennas.B1 = [30, 5]",
        "termination.ports.A2/y = 75",
        "termination.amplifier_off = 20 ohm + 3e-12 F in series",
    ):
        assert expected in lines


def test_terminations__zero_ohm_is_zero_and_nothing_is_a_hundred(folder):
    assert job_of(folder, termination="impedance_ohm = 0\n[termination.antennas]\nA1 = 0").termination_values() == [0.0] * 5
    assert job_of(folder, termination='[termination.ports]\n"A1/x" = 5').termination_values() == [5.0, *[100.0] * 4]


def test_terminations__changing_an_amplifier_or_what_is_dead_solves_nothing_again(folder, solves):
    weights = []
    for parts in (
        {},
        {"termination": TERMINATIONS},
        {"termination": TERMINATIONS.replace("lna.s1p", "other.s1p")},
        {"damage": '[station.damage]\nopen = ["A2"]\nshorted = ["A1/y"]'},
        {"damage": '[station.damage]\namplifier_off = ["A2"]', "termination": "amplifier_off = [5, -40]"},
    ):
        (folder / "other.s1p").write_text(LNA.replace("0.2 0.1", "0.5 0.1").replace("0.3 -0.1", "0.6 -0.1"))
        run = JobRun(job_of(folder, **parts))
        outcome = [beam_fields(run.solution(f), run.job.beams, SKY, run.termination_at(f)).coupled for f in run.frequencies_hz]
        weights.append(np.array(outcome))
    assert len(solves) == 2
    for i in range(1, len(weights)):
        # and every one of them changes the beams
        assert np.abs(weights[i] - weights[i - 1]).max() > 1e-3 * np.abs(weights[0]).max()


def test_damage__a_missing_antenna_is_another_structure(folder, solves):
    whole = JobRun(job_of(folder))
    damaged = JobRun(job_of(folder, damage='[station.damage]\nmissing = ["B1"]'))
    assert [p.name for p in damaged.station] == ["A1", "A2"]
    assert len(damaged.termination_at(80e6)) == 4
    frequency = 80e6
    solution = damaged.solution(frequency)
    whole.solution(frequency)
    assert len(solves) == 2
    expected = solve(Station(whole.station.placed[:2], whole.station.ground), frequency).impedance_matrix()
    np.testing.assert_allclose(solution.impedance_matrix(), expected, rtol=1e-9)
    assert "station.damage.missing = B1 (structure absent)" in damaged.job.resolved_lines()
    assert any(
        line.startswith("beam.all = ") and line.endswith("; without B1 (missing)") for line in damaged.job.resolved_lines()
    )


def test_damage__dead_antennas_have_no_weight_and_still_couple(folder):
    job = job_of(folder, damage='[station.damage]\nopen = ["B1"]\nshorted = ["A2/x"]\n')
    run = JobRun(job)
    assert run.termination_at(80e6) == [100.0, 100.0, "short", 100.0, "open"]
    solution = run.solution(80e6)
    weights = beam_weights(solution, job.beams)
    assert [np.flatnonzero(row).tolist() for row in weights] == [[0], [0]]
    dead = solution.beam(weights[0], SKY.theta_rad, SKY.phi_rad, termination=run.termination_at(80e6))
    # the same sum with nothing broken differs, because what the dead ports see changes what A1 hears
    alive = solution.beam(weights[0], SKY.theta_rad, SKY.phi_rad, termination=100.0)
    assert np.abs(dead - alive).max() > 1e-3 * np.abs(alive).max()
    isolated = solution.isolated_beam(weights[0], SKY.theta_rad, SKY.phi_rad, termination=run.termination_at(80e6))
    unmoved = solution.isolated_beam(weights[0], SKY.theta_rad, SKY.phi_rad, termination=100.0)
    np.testing.assert_allclose(isolated, unmoved, atol=1e-12)
    lines = job.resolved_lines()
    assert "station.damage.open = B1/x (structure stays; weight 0 in every beam)" in lines
    assert "station.damage.shorted = A2/x (structure stays; weight 0 in every beam)" in lines
    assert any(line.startswith("beam.all = ") and line.endswith("; without A2, B1 (dead)") for line in lines)
    assert any(line.startswith("beam.some = ") and line.endswith("; without A2 (dead)") for line in lines)


def test_damage__a_dead_port_goes_before_its_termination(folder):
    parts = TERMINATIONS + '"A1/x" = 12\n'
    job = job_of(folder, termination=parts, damage='[station.damage]\namplifier_off = ["A1/x"]\nshorted = ["A2/y"]')
    assert job.port_terminations()[0] == job.terminations.amplifier_off
    assert job.port_terminations()[3] == "short"
    assert job.terminations.of(PortName("A1", "x")) == 12.0


@pytest.mark.parametrize(
    ("damage", "termination", "expected"),
    [
        ('missing = ["A11"]', "", "station.damage.missing[0]: no antenna 'A11'; did you mean 'A1'?"),
        ('missing = ["A1/x"]', "", "station.damage.missing[0]: no antenna 'A1/x'"),
        ('open = ["A1/z"]', "", "station.damage.open[0]: no antenna or port 'A1/z'; did you mean 'A1/y'?"),
        ('open = ["A1"]\nshorted = ["A1/x"]', "", "station.damage.shorted[0]: 'A1/x' is named at station.damage.open[0] already"),
        ('missing = ["A1", "A2", "B1"]', "", "station.damage.missing: no antenna is left"),
        ('missing = "A1"', "", 'station.damage.missing = "A1": expected a list in [ ]'),
        ('mising = ["A1"]', "", "station.damage.mising: unknown key; did you mean 'missing'?"),
        ('amplifier_off = ["A1"]', "", "termination.amplifier_off: required key is missing beside station.damage.amplifier_off"),
        ('open = ["A1"]\nmissing = ["A2"]', "", "beam[1]: all its antennas are dead or missing"),
        ("", 'file = "lan.s1p"', "lan.s1p: no such Touchstone file; did you mean 'lna.s1p'?"),
        ("", 'file = "short.s1p"', "termination.file: short.s1p: covers 90000000 to 200000000 Hz; 80000000 Hz lies outside; [band]"),
        ("", 'file = "two.s2p"', "two.s2p: 2 ports found, 1 expected"),
        ("", 'file = "active.s1p"', "termination.file: active.s1p: negative resistance at 50000000 Hz"),
        ("", 'file = "empty.s1p"', "empty.s1p: nothing but comments"),
        ("", 'file = "falling.s1p"', "falling.s1p: line 3: frequency 50 after 100; rising frequencies expected"),
        ("", 'file = "lna.s1p"\nimpedance_ohm = 50', "termination: impedance_ohm and file are given; expected one"),
        ("", "resistance_ohm = 50", 'termination: circuit = "series" or "parallel" is missing beside resistance_ohm'),
        ("", 'file = "lna.s1p"\nresistance_ohm = 50', "termination: resistance_ohm is given beside file"),
        ("", 'circuit = "series"', "resistance_ohm, inductance_h or capacitance_f expected"),
        ("", 'circuit = "serial"\nresistance_ohm = 5', "did you mean 'series'?"),
        ("", 'circuit = "series"\nresistance_ohm = -5', "termination.resistance_ohm: -5.0: a resistance of -5 ohm is negative"),
        ("", 'circuit = "series"\ncapacitance_f = 0', "termination.capacitance_f = 0: expected a number above 0"),
        ("", 'circuit = "series"\ninductance_h = nan', "termination.inductance_h = nan: expected a finite number"),
        ("", 'circuit = "series"\ninductance_h = 50', "termination.inductance_h = 50: expected a number below 0.01"),
        ("", 'circuit = "parallel"\ncapacitance_f = 2', "termination.capacitance_f = 2: expected a number below 0.001"),
        ("", 'circuit = "parallel"\nresistance_ohm = 0', "is a short circuit"),
        ("", "[termination.antennas]\nA22 = 50", "termination.antennas.A22: no such antenna; did you mean 'A2'?"),
        ("", '[termination.ports]\n"A1/x" = { fiel = "lna.s1p" }', "termination.ports.\"A1/x\".fiel: unknown key; did you mean 'file'?"),
        ("", '[termination.ports]\n"A1/x" = {}', 'termination.ports."A1/x": an empty table'),
        ("", '[termination.antennas]\nA1 = { impedance_ohm = "opne" }', "termination.antennas.A1.impedance_ohm: \"opne\" is not known"),
        # leave given for one table holds for that table only
        ("", "allow_negative_resistance = true\n[termination.antennas]\nA1 = -5", "termination.antennas.A1: -5: a resistance of -5 ohm is negative"),
        ("", "amplifier_off = -5", "termination.amplifier_off: -5: a resistance of -5 ohm is negative"),
    ],
)  # fmt: skip
def test_bad_jobs__name_key_found_and_expected(folder, damage, termination, expected):
    (folder / "short.s1p").write_text("# MHz S RI R 50\n90 0 0\n200 0 0\n")
    (folder / "two.s2p").write_text("# MHz S RI R 50\n90 0 0 0 0 0 0 0 0\n")
    (folder / "active.s1p").write_text("# MHz S RI R 50\n50 1.5 0\n200 0 0\n")
    (folder / "empty.s1p").write_bytes(b"! one\r\n! two\r")
    (folder / "falling.s1p").write_bytes(b"# MHz S RI R 50\r100 0 0\r\n50 0 0\n")
    problems = faults(folder, damage=f"[station.damage]\n{damage}" if damage else "", termination=termination)
    assert any(expected in p for p in problems), problems
    assert len(problems) == 1


def test_random_damage_of_the_file__never_raises_anything_else(folder):
    (folder / "built.csv").write_text("name,offset_east_m\nA2,0.02\n")
    whole = (
        JOB.replace("# as-built", 'as_built = "built.csv"')
        .replace("# damage", '[station.damage]\nmissing = ["B1"]\nopen = ["A2/x"]\namplifier_off = ["A1/y"]')
        .replace("# termination", TERMINATIONS)
    )
    rng = np.random.default_rng(11)
    letters = list("[]{}=\"'#.,\n 1-aex/")
    usable = 0
    for _ in range(200):
        text = list(whole)
        for _ in range(rng.integers(1, 4)):
            place = int(rng.integers(len(text)))
            text[place : place + int(rng.integers(0, 3))] = letters[int(rng.integers(len(letters)))]
        (folder / "job.toml").write_text("".join(text))
        with contextlib.suppress(ElbowroomError):  # anything else fails the test
            job = read_job(folder / "job.toml")
            job.resolved_lines()
            job.termination_values()
            usable += 1
    assert 0 < usable < 200


def test_negative_resistance__is_let_in_on_request_and_warned_of(folder):
    (folder / "active.s1p").write_text("# MHz S RI R 50\n50 1.5 0.3\n200 1.4 0\n")
    job = job_of(
        folder,
        termination="impedance_ohm = [-20, 5]\nallow_negative_resistance = true\n[termination.antennas]\n"
        'A2 = { file = "active.s1p", allow_negative_resistance = true }\n'
        'B1 = { circuit = "series", resistance_ohm = -3, inductance_h = 1e-8, allow_negative_resistance = true }\n',
    )
    run = JobRun(job)
    assert all(complex(value).real < 0.0 for value in run.termination_at(80e6))
    told = [p.text for p in run.problems() if "negative" in p.text]
    assert [text.partition(" = ")[0] for text in told] == ["termination", "termination.antennas.A2", "termination.antennas.B1"]
    assert all(p.severity == "warning" for p in run.problems() if "negative" in p.text)
    solution = run.solution(80e6)
    found = beam_fields(solution, job.beams, SKY, run.termination_at(80e6)).coupled
    # against the impedance formula: h = Z_T (Z + Z_T)^-1 h_open
    loads = np.array([complex(value) for value in run.termination_at(80e6)])
    opened = solution.embedded_patterns(SKY.theta_rad, SKY.phi_rad, termination="open")
    transfer = np.diag(loads) @ np.linalg.inv(solution.impedance_matrix() + np.diag(loads))
    expected = np.einsum("bp,pq,qdc->bdc", beam_weights(solution, job.beams), transfer, opened)
    np.testing.assert_allclose(found, expected, atol=1e-8 * np.abs(expected).max())
    with pytest.raises(ModelRangeError, match="negative"):
        solution.beam(np.ones(5), [0.1], [0.0], termination=-20.0)


def test_as_built__moves_antennas_before_the_station_is_turned(folder, solves):
    (folder / "built.csv").write_text("name,offset_east_m,offset_up_m,offset_tilt_north_deg\nA2,0.02,0,2\nB1,0,-0.01,0\n")
    designed = job_of(folder)
    job = job_of(folder, as_built='as_built = "built.csv"\nturn_deg = 90')
    assert job.offsets is not None
    place = job.station().placed[1]
    # 90 degrees from east towards north take (1.72, 0.3) to (-0.3, 1.72), and a lean to the north to one to the west
    np.testing.assert_allclose(place.position, [-0.3, 1.72, 0.0], atol=1e-12)
    np.testing.assert_allclose(place.orientation @ [0, 0, 1], [-np.sin(np.deg2rad(2)), 0, np.cos(np.deg2rad(2))], atol=1e-12)
    assert job.station().placed[2].position[2] == pytest.approx(-0.01)
    assert f"station.as_built = {folder / 'built.csv'} (2 antennas, moved by up to 0.02 m)" in job.resolved_lines()
    # as designed, the turn alone is no new solve; as built it is
    back = job.as_designed()
    assert back.offsets is None
    JobRun(designed).solution(80e6)
    as_designed = JobRun(back).solution(80e6)
    assert len(solves) == 1
    as_built = JobRun(job).solution(80e6)
    assert len(solves) == 2
    change = np.abs(as_built.impedance_matrix() - as_designed.impedance_matrix()).max()
    assert 0.01 < change < 20.0


def test_as_designed__is_whole_again(folder):
    job = job_of(folder, damage='[station.damage]\nmissing = ["B1"]\nopen = ["A2"]')
    back = job.as_designed()
    assert [p.name for p in back.station()] == ["A1", "A2", "B1"]
    assert back.port_terminations() == [100.0] * 5
    assert back.beams[0].amplitudes(back.station()).tolist() == [1, 0, 1, 0, 1]
    assert not any("damage" in line or "without" in line for line in back.resolved_lines())


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("name,offset_east_m\nA22,0.1\n", "station.as_built: no antenna 'A22'; did you mean 'A2'?"),
        ("name,offset_east_m\nA2,20\n", "station.as_built: line 2: offset_east_m = 20: at most 5 m expected; millimetres?"),
        ("name,offset_east_m,offset_north_m\nA2,-1.7,-0.3\n", "stands at the same place as 'A1'"),
    ],
)
def test_as_built__bad_files_are_told_by_key(folder, text, expected):
    (folder / "built.csv").write_text(text)
    problems = faults(folder, as_built='as_built = "built.csv"')
    assert any(expected in p for p in problems), problems
    assert any("no such file" in p for p in faults(folder, as_built='as_built = "bulit.csv"'))


def test_mixed_designs__beams_are_sums_over_both_and_isolated_ones_those_of_each_alone(folder):
    run = JobRun(job_of(folder, termination=TERMINATIONS))
    frequency = 120e6
    solution, seen = run.solution(frequency), run.termination_at(frequency)
    assert [len(p.antenna.ports) for p in run.station] == [2, 2, 1]
    fields = beam_fields(solution, run.job.beams, SKY, seen)
    weights = fields.weights[0]
    assert np.flatnonzero(weights).tolist() == [0, 2, 4]
    patterns = solution.embedded_patterns(SKY.theta_rad, SKY.phi_rad, termination=seen)
    np.testing.assert_allclose(fields.coupled[0], np.einsum("p,pdc->dc", weights, patterns), atol=1e-10)
    alone = np.zeros_like(fields.isolated[0])
    first = 0
    for placed in run.station:
        count = len(placed.antenna.ports)
        single = solve(Station([placed], run.station.ground), frequency)
        each = single.embedded_patterns(SKY.theta_rad, SKY.phi_rad, termination=seen[first : first + count])
        alone += np.einsum("p,pdc->dc", weights[first : first + count], each)
        first += count
    np.testing.assert_allclose(fields.isolated[0], alone, atol=1e-9)
    assert np.abs(fields.coupled[0] - fields.isolated[0]).max() > 1e-2 * np.abs(alone).max()
