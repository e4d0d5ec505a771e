"""Touchstone files: ours read by an independent reader, an independent writer's read by us, and bad files of every kind."""

import contextlib
import warnings

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from elbowroom.base.errors import ElbowroomError, ExportError, JobFileError, ModelRangeError
from elbowroom.job.touchstone import PortMatrices, read_touchstone, reflection_from_file
from elbowroom.job.touchstonewriter import write_touchstone

with warnings.catch_warnings():
    # what the reader imports is none of our business
    warnings.simplefilter("ignore")
    import skrf

FREQUENCY = np.array([50e6, 123.456789e6, 350e6])


def passive(n, seed=0):
    rng = np.random.default_rng(seed)
    s = rng.normal(size=(3, n, n)) + 1j * rng.normal(size=(3, n, n))
    return 0.8 * s / np.linalg.norm(s, 2, axis=(1, 2))[:, None, None]


def matrices_of(s, parameter, reference):
    # Z = F^-1 (1 - S)^-1 (1 + S) F^-1 with F = 1/sqrt(R), for example Pozar, Microwave Engineering, 4th ed., section 4.3
    one, root = np.eye(s.shape[-1]), np.sqrt(np.asarray(reference))
    z = np.linalg.solve(one - s, one + s) * np.outer(root, root)
    return {"S": s, "Z": z, "Y": np.linalg.inv(z)}[parameter]


@pytest.mark.parametrize("n", [1, 2, 3, 4, 6])
@pytest.mark.parametrize("parameter", ["S", "Z", "Y"])
@pytest.mark.parametrize("form", ["ri", "ma", "db"])
@pytest.mark.parametrize("version", ["1.0", "2.0"])
def test_read__what_an_independent_writer_wrote(tmp_path, n, parameter, form, version):
    s = passive(n)
    net = skrf.Network(frequency=skrf.Frequency.from_f(FREQUENCY, unit="hz"), s=s, z0=75.0)
    net.write_touchstone("theirs", dir=tmp_path, form=form, parameter=parameter, version=version, r_ref=75.0)
    (file,) = tmp_path.glob("theirs.*")
    data = read_touchstone(file, ports=n)
    np.testing.assert_allclose(data.frequency_hz, FREQUENCY, rtol=1e-14)
    assert data.parameter == parameter
    np.testing.assert_array_equal(data.reference_ohm, np.full(n, 75.0))
    expected = matrices_of(s, parameter, np.full(n, 75.0))
    np.testing.assert_allclose(data.matrices, expected, rtol=0, atol=1e-11 * np.abs(expected).max())


def numbers_of(file):
    lines = [line.partition("!")[0] for line in file.read_text().splitlines()]
    return np.array([float(token) for line in lines if not line.startswith("#") for token in line.split()])


@pytest.mark.parametrize("n", [1, 2, 3, 5, 9])
@pytest.mark.parametrize("parameter", ["S", "Z", "Y"])
@pytest.mark.parametrize("version", [1, 2])
def test_write__an_independent_reader_reads_the_same(tmp_path, n, parameter, version):
    s = passive(n, 3)
    reference = np.full(n, 100.0) if version == 1 else 50.0 + 10.0 * np.arange(n)
    data = PortMatrices(FREQUENCY, parameter, matrices_of(s, parameter, reference), reference, ("port 1: A001/x",))
    file = tmp_path / f"ours.s{n}p"
    write_touchstone(file, data, version=version)
    if (parameter, version) == ("Y", 1):
        # scikit-rf 2.2 does not read back the normalised admittances that it writes, so its file is compared, number by number
        net = skrf.Network(frequency=skrf.Frequency.from_f(FREQUENCY, unit="hz"), s=s, z0=100.0)
        net.write_touchstone("theirs", dir=tmp_path, parameter="Y", r_ref=100.0)
        np.testing.assert_allclose(numbers_of(file), numbers_of(tmp_path / f"theirs.y{n}p"), rtol=1e-9, atol=1e-12)
    else:
        net = skrf.Network(str(file))
        np.testing.assert_allclose(net.f, FREQUENCY, rtol=1e-14)
        np.testing.assert_allclose(net.s, s, atol=1e-11)
        np.testing.assert_allclose(net.z0, np.broadcast_to(reference, net.z0.shape))
    back = read_touchstone(file)
    np.testing.assert_allclose(back.matrices, data.matrices, rtol=1e-15 if version == 1 else 0)
    np.testing.assert_array_equal(back.reference_ohm, reference)
    np.testing.assert_array_equal(back.frequency_hz, FREQUENCY)
    assert back.comments == ("port 1: A001/x",)


def text_file(tmp_path, text, name="a.s1p"):
    (tmp_path / name).write_bytes(text if isinstance(text, bytes) else text.encode())
    return tmp_path / name


def test_read__units_defaults_comments_and_any_mix_of_line_ends(tmp_path):
    text = b"! head\r\n!\r#  mhz ri\n\r\n 50 0.1 0.2 ! first\r\n# GHz S MA R 1\r\t100\t-.3 4e-1\r\n! caf\xe9 3\xb0\n150 .5 -0\r"
    data = read_touchstone(text_file(tmp_path, text))
    np.testing.assert_allclose(data.frequency_hz, [50e6, 100e6, 150e6], rtol=1e-15)
    np.testing.assert_array_equal(data.matrices[:, 0, 0], [0.1 + 0.2j, -0.3 + 0.4j, 0.5])
    assert data.reference_ohm[0] == 50.0
    assert data.comments == ("head", "first", "caf\xe9 3\xb0")
    bare = read_touchstone(text_file(tmp_path, "#\n0.1 0.5 90\n"))
    assert (bare.frequency_hz[0], bare.parameter) == (1e8, "S")
    assert bare.matrices[0, 0, 0] == pytest.approx(0.5j)


def test_read__decibels_and_normalised_impedances(tmp_path):
    data = read_touchstone(text_file(tmp_path, "# Hz S DB R 50\n1e8 -6.020599913279624 180\n"))
    assert data.matrices[0, 0, 0] == pytest.approx(-0.5)
    assert read_touchstone(text_file(tmp_path, "# Hz Z RI R 75\n1e8 2 1\n")).matrices[0, 0, 0] == pytest.approx(150 + 75j)
    assert read_touchstone(text_file(tmp_path, "# Hz Y RI R 50\n1e8 2 1\n")).matrices[0, 0, 0] == pytest.approx(0.04 + 0.02j)


def test_read__two_ports_run_down_columns_and_noise_is_skipped(tmp_path):
    text = "# Hz S RI R 50\n1e8 11 0 21 0 12 0 22 0\n2e8 1 0 2 0 3 0 4 0\n1e8 0.6 0.4 80 0.2\n2e8 0.7 0.4 80 0.2\n"
    data = read_touchstone(text_file(tmp_path, text, "a.s2p"))
    np.testing.assert_array_equal(data.matrices[0].real, [[11, 12], [21, 22]])
    assert len(data.frequency_hz) == 2


def test_read__a_nameless_file_tells_its_ports_by_its_numbers(tmp_path):
    text = "# Hz S RI R 50\n1e8 1 0 2 0 3 0\n 4 0 5 0 6 0\n 7 0 8 0 9 0\n2e8 1 0 2 0 3 0\n 4 0 5 0 6 0\n 7 0 8 0 9 0\n"
    data = read_touchstone(text_file(tmp_path, text, "a.txt"))
    np.testing.assert_array_equal(data.matrices[0].real, np.arange(1, 10).reshape(3, 3))
    assert read_touchstone(text_file(tmp_path, "# Hz S RI R 50 60\n1e8 1 0 2 0 3 0 4 0\n", "b.s2p")).reference_ohm.tolist() == [
        50,
        60,
    ]


HEAD = "[Version] 2.0\n# Hz S RI R 50\n"


@pytest.mark.parametrize(
    ("shape", "numbers", "expected"),
    [
        ("Full", "1 0 2 0 3 0 4 0 5 0 6 0 7 0 8 0 9 0", [[1, 2, 3], [4, 5, 6], [7, 8, 9]]),
        ("Lower", "1 0\n 2 0 3 0\n 4 0 5 0 6 0", [[1, 2, 4], [2, 3, 5], [4, 5, 6]]),
        ("upper", "1 0 2 0 3 0\n 4 0 5 0\n 6 0", [[1, 2, 3], [2, 4, 5], [3, 5, 6]]),
    ],
)
def test_read__version_2_matrix_formats(tmp_path, shape, numbers, expected):
    text = (
        f"! head\n{HEAD}[Number of Ports] 3\n[Number of Frequencies] 1\n[Begin Information]\nfree [text] here\n[End Information]\n"
        f"[Reference] 50\n 60 70\n[Matrix Format] {shape}\n[Network Data]\n1e8 {numbers}\n"
        "[Noise Data]\n1e8 1 2 3 4\n[End]\nwhatever follows\n"
    )
    data = read_touchstone(text_file(tmp_path, text, "a.ts"))
    np.testing.assert_array_equal(data.matrices[0].real, expected)
    assert data.reference_ohm.tolist() == [50, 60, 70]


@pytest.mark.parametrize(("order", "expected"), [("12_21", [[1, 2], [3, 4]]), ("21_12", [[1, 3], [2, 4]])])
def test_read__version_2_two_port_orders(tmp_path, order, expected):
    text = (
        f"{HEAD}[number of ports] 2\n[Two-Port Data Order] {order}\n[Number of Frequencies] 1\n[Network Data]\n"
        "1e8 1 0 2 0 3 0 4 0\n[End]\n"
    )
    np.testing.assert_array_equal(read_touchstone(text_file(tmp_path, text, "a.s2p")).matrices[0].real, expected)


def test_read__version_2_impedances_are_plain_ohms(tmp_path):
    text = "[Version] 2.0\n# Hz Z RI R 75\n[Number of Ports] 1\n[Number of Frequencies] 1\n[Network Data]\n1e8 30 4\n[End]\n"
    assert read_touchstone(text_file(tmp_path, text)).matrices[0, 0, 0] == 30 + 4j


ONE = "# Hz S RI R 50\n1e8 0.1 0.2\n2e8 0.3 0.4\n"
TWO = f"{HEAD}[Number of Ports] 1\n[Number of Frequencies] 2\n[Network Data]\n1e8 0.1 0.2\n2e8 0.3 0.4\n[End]\n"


@pytest.mark.parametrize(
    ("text", "match"),
    [
        ("", "the file is empty"),
        ("  \r\n", "the file is empty"),
        ("! nothing\r\n! but\n! comments", "nothing but comments"),
        ("# Hz S RI R 50\n! no data\n", "line 1: no data below the option line"),
        ("1e8 0.1 0.2\n", "line 1: '1e8 0.1 0.2' before the option line"),
        (ONE.replace("Hz", "THz"), "line 1: option line: 'THz' is not known"),
        (ONE.replace("RI", "RI MA"), "line 1: option line: 'MA' beside 'RI'"),
        (ONE.replace(" 50", ""), "line 1: option line: R without a resistance"),
        (ONE.replace("50", "-50"), "line 1: option line: R -50: expected a positive resistance"),
        (ONE.replace("50", "nan"), "line 1: option line: R without a resistance"),
        (ONE.replace("50", "50 60"), "line 1: 2 reference resistances found, 1 or 1"),
        (ONE.replace("S", "H"), "line 1: option line: H parameters are not supported"),
        (ONE.replace("S", "g"), "line 1: option line: G parameters are not supported"),
        (ONE.replace("2e8", "0.5e8"), "line 3: frequency 50000000 after 100000000; rising frequencies expected"),
        (ONE.replace("2e8", "1e8"), "line 3: frequency 100000000 after 100000000; rising"),
        (ONE.replace("1e8", "-1e8"), "line 2: frequency -1e[+]08 is negative"),
        (ONE.replace("0.3 0.4", "0.3"), "line 3: 2 numbers found for this frequency, 3 expected [(]1 port[)]"),
        (ONE.replace("0.1 0.2", "0.1"), "line 2: "),
        (ONE.replace("0.4", "nan"), "line 3: 'nan' is not a finite number"),
        (ONE.replace("0.4", "inf"), "line 3: 'inf' is not a finite number"),
        (ONE.replace("0.4", "1_0"), "line 3: '1_0' is not a number"),
        (ONE.replace("0.4", "four"), "line 3: 'four' is not a number"),
        (ONE.replace("RI", "DB").replace("0.3", "1e5"), "too large"),
        ("# Hz S RI R 50\n1e8 1 0 2 0 3 0 4 0\n", "line 2: the name says 1 port, but the first frequency has the 9 numbers of 2 ports"),
        (b"\xff\xfe#\0", "not plain text"),
        (TWO.replace("2.0", "3.0"), "line 1: .Version. 3.0: expected 2.0 or 2.1"),
        (TWO.replace("[End]", ""), "End. is missing; the file may have been cut short"),
        (TWO.replace("[Number of Ports] 1\n", ""), "Number Of Ports. is missing"),
        (TWO.replace("[Number of Ports] 1", "[Number of Ports] one"), "line 3: .Number Of Ports. one: expected a whole number"),
        (TWO.replace("[Number of Ports] 1", "[Number of Prots] 1"), "line 3: .Number of Prots. is not known; did you mean 'number of ports'"),
        (TWO.replace("Frequencies] 2", "Frequencies] 3"), "line 4: .Number of Frequencies. 3, but 2 found"),
        (TWO.replace("[Number of Frequencies] 2\n", ""), "Number Of Frequencies. is missing"),
        (TWO.replace("# Hz S RI R 50\n", ""), "the option line"),
        (TWO.replace("[Network Data]", "[Reference] 50 50\n[Network Data]"), "line 5: .Reference.: 2 resistances found, 1 expected"),
        (TWO.replace("[Network Data]", "[Reference] 0\n[Network Data]"), "line 5: .Reference.: expected positive"),
        (TWO.replace("[Network Data]", "[Matrix Format] Diagonal\n[Network Data]"), "line 5: .Matrix Format. Diagonal"),
        (TWO.replace("[Network Data]", "[Mixed-Mode Order] D1,2\n[Network Data]"), "line 5: mixed-mode data are not supported"),
        (TWO.replace("[Network Data]", "[Number of Ports] 1\n[Network Data]"), "line 5: .number of ports. again"),
        (TWO.replace("[Network Data]\n", ""), "line 5: '1e8 0.1 0.2' where a keyword"),
        (TWO.replace("Ports] 1", "Ports] 2"), "line 3: .Number of Ports. 2, but the name says 1"),
        (TWO.replace("0.3 0.4", "0.3"), "line 7: 2 numbers found for this frequency, 3 expected"),
        ("# Hz S RI R 50\n[Version] 2.0\n", "line 2: .Version. 2.0 among the data"),
    ],
)  # fmt: skip
def test_bad_files__name_line_found_and_expected(tmp_path, text, match):
    file = text_file(tmp_path, text)
    with pytest.raises(JobFileError, match=match) as caught:
        read_touchstone(file)
    assert caught.value.file == str(file)


def test_bad_files__wrong_number_of_ports_for_the_use(tmp_path):
    text_file(tmp_path, "# Hz S RI R 50\n1e8 1 0 2 0 3 0 4 0\n", "two.s2p")
    with pytest.raises(JobFileError, match="2 ports found, 1 expected"):
        reflection_from_file(tmp_path / "two.s2p")
    text = (
        TWO.replace("Ports] 1", "Ports] 2\n[Two-Port Data Order] 12_21")
        .replace("0.2", "0 1 0 1 0 1 0")
        .replace("0.4", "0 1 0 1 0 1 0")
    )
    with pytest.raises(JobFileError, match="2 ports found, 1 expected"):
        reflection_from_file(text_file(tmp_path, text, "b.ts"))


def test_bad_files__that_are_not_there(tmp_path):
    text_file(tmp_path, ONE, "lna.s1p")
    with pytest.raises(JobFileError, match=r"lan\.s1p: no such Touchstone file; did you mean 'lna\.s1p'"):
        read_touchstone(tmp_path / "lan.s1p")
    with pytest.raises(JobFileError, match="is a folder"):
        read_touchstone(tmp_path)
    with pytest.raises(JobFileError, match="cannot be read"):
        read_touchstone("a\0b")


@settings(max_examples=150, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(st.sampled_from([ONE, TWO]), st.integers(0, 90), st.text(alphabet="[]#!RSYZ0123.e- \n\rnaif", max_size=4))
def test_random_damage__never_raises_anything_else(tmp_path, text, place, letters):
    file = text_file(tmp_path, text[:place] + letters + text[place + len(letters) :])
    with contextlib.suppress(ElbowroomError):
        assert np.isfinite(read_touchstone(file).matrices).all()


def test_reflection__is_the_same_from_s_y_and_z(tmp_path):
    z = 30 + 40j
    ratio = z / 50
    s, y = (ratio - 1) / (ratio + 1), 1 / ratio
    for parameter, value in (("S", s), ("Z", ratio), ("Y", y)):
        file = text_file(tmp_path, f"# MHz {parameter} RI R 50\n100 {value.real!r} {value.imag!r}\n")
        assert reflection_from_file(file).impedance(1e8) == pytest.approx(z, rel=1e-12)
    with pytest.raises(JobFileError, match="minus the reference"):
        reflection_from_file(text_file(tmp_path, "# Hz Z RI R 50\n1e8 -1 0\n"))


def test_reflection__negative_resistance_is_refused_unless_meant(tmp_path):
    file = text_file(tmp_path, "# Hz S RI R 50\n1e8 1.2 0\n")
    with pytest.raises(ModelRangeError, match=r"a\.s1p: negative resistance at 100000000 Hz"):
        reflection_from_file(file)
    assert reflection_from_file(file, allow_negative_resistance=True).impedance(1e8) == pytest.approx(-550.0)


@pytest.mark.parametrize(
    ("changes", "options", "name", "match"),
    [
        ({}, {"version": 3}, "a.s2p", "version 3: expected 1 or 2"),
        ({"parameter": "H"}, {}, "a.s2p", "parameter 'H'"),
        ({}, {}, "a.s3p", r"the name must end in \.s2p, as the file has 2 ports"),
        ({}, {}, "a.ts", "the name must end in"),
        ({"reference_ohm": np.array([50.0, 75.0])}, {}, "a.s2p", "only version 2"),
        ({"reference_ohm": np.array([50.0, 0.0])}, {"version": 2}, "a.s2p", "positive reference"),
        ({"frequency_hz": FREQUENCY[::-1]}, {}, "a.s2p", "that rise"),
        ({"frequency_hz": FREQUENCY[:2]}, {}, "a.s2p", "expected matrices"),
        ({"matrices": np.full((3, 2, 2), np.nan + 0j)}, {}, "a.s2p", "finite"),
    ],
)
def test_write__what_cannot_be_said_is_refused_and_leaves_no_file(tmp_path, changes, options, name, match):
    parts = {"frequency_hz": FREQUENCY, "parameter": "S", "matrices": passive(2), "reference_ohm": np.full(2, 50.0)} | changes
    with pytest.raises(ExportError, match=match):
        write_touchstone(tmp_path / name, PortMatrices(**parts), **options)
    assert list(tmp_path.iterdir()) == []
