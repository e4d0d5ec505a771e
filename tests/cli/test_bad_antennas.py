"""Antenna files and terminations that cannot be used, as the command line tells them: file or key, what was found, what was expected."""

import pytest

FED = """
[[wire]]
name = "upper"
start_m = [-0.5, 0.0, 1.5]
end_m = [0.5, 0.0, 1.5]
radius_m = 0.003

[[wire]]
name = "lower"
start_m = [-0.6, 0.0, 1.2]
end_m = [0.6, 0.0, 1.2]
radius_m = 0.003

[[port]]
name = "x"
wire = "upper"

[[feed]]
name = "behind"
wire = "lower"

[[line]]
start = "x"
end = "behind"
impedance_ohm = 120.0
length_m = 0.3
crossed = true
"""
LOG_PERIODIC = """
shape = "log-periodic"
height_m = 1.2
wire_radius_m = 0.004
half_lengths_m = [0.3, 0.4, 0.5]
positions_m = [0.0, 0.1, 0.25]
feeder_impedance_ohm = 120.0
"""
ONE_PORT = "# MHz S RI R 50\n50 0.1 0.2\n200 0.3 0.4\n"


@pytest.mark.parametrize(
    ("text", "old", "new", "code", "words"),
    [
        (FED, 'end = "behind"', 'end = "beyond"', 2, ("line[0].end", "beyond", "no feed or port has this name")),
        (FED, 'start = "x"', 'start = "z"', 2, ("line[0].start", '"z"', "no feed or port has this name")),
        (FED, 'wire = "lower"', 'wire = "lwoer"', 2, ("feed[0].wire", "lwoer", "did you mean 'lower'")),
        (FED, "[0.5, 0.0, 1.5]", "[0.5, 0.0, 1.0]", 3, ("cannot be modelled", "cross")),
        (LOG_PERIODIC, "0.1, 0.25]", "0.006, 0.25]", 2, ("come within 0.00", "sum of their radii")),
        (LOG_PERIODIC, "0.1, 0.25]", "0.1, 0.1]", 2, ("positions_m", "then increasing")),
        (LOG_PERIODIC, "0.5]", "-0.5]", 2, ("half_lengths_m must be positive",)),
        (LOG_PERIODIC, "0.25]", "1.25]", 2, ("raise height_m",)),
    ],
)
def test_antenna_file__that_cannot_be_used__is_told(command, tmp_path, text, old, new, code, words):
    file = tmp_path / "design.toml"
    options = ("antenna", file, "--frequency-hz", 120e6, "--no-convergence", "--quiet")
    assert text.count(old) == 1
    file.write_text(text.replace(old, new))
    outcome = command(*options)
    assert outcome.code == code, outcome.all
    assert "Traceback" not in outcome.all
    told = " ".join(outcome.err.split())
    for word in words:
        assert word in told, told
    assert not (tmp_path / "store").exists()


@pytest.mark.parametrize("text", [FED, LOG_PERIODIC])
def test_antenna_file__of_the_bad_ones_put_right__is_solved(command, tmp_path, text):
    file = tmp_path / "design.toml"
    file.write_text(text)
    assert command("antenna", file, "--frequency-hz", 120e6, "--no-convergence", "--quiet").code == 0


@pytest.mark.parametrize(
    ("name", "text", "words"),
    [
        ("lna.s1p", "", ("lna.s1p", "empty")),
        ("lna.s1p", "! nothing\r\n! but\r! comments\n", ("lna.s1p", "nothing but comments")),
        ("lna.s1p", ONE_PORT.replace("200", "40"), ("lna.s1p", "line 3", "frequency 40 after 50; rising")),
        ("lna.s1p", ONE_PORT.replace("0.1 0.2", "1.5 0.2"), ("lna.s1p", "negative", "allow_negative_resistance")),
        ("lna.s1p", ONE_PORT.replace("200", "100"), ("lna.s1p", "110")),
        ("lna.s2p", "# MHz S RI R 50\n50 1 0 2 0 3 0 4 0\n200 1 0 2 0 3 0 4 0\n", ("lna.s2p", "2 ports found, 1 expected")),
        ("lna.s1p", "# MHz S RI R 50\n50 1 0 2 0 3 0 4 0\n200 1 0 2 0 3 0 4 0\n", ("lna.s1p", "1 port", "2 ports")),
    ],
)
def test_termination_file__that_cannot_be_used__is_told(command, job, change, name, text, words):
    (job.parent / name).write_bytes(text.encode())
    change(job, "impedance_ohm = 100.0", f'file = "{name}"')
    outcome = command("inspect", job)
    assert outcome.code == 2, outcome.all
    assert "Traceback" not in outcome.all
    told = " ".join(outcome.err.split())
    for word in words:
        assert word in told, told


def test_termination_file__with_mixed_line_ends__is_read(command, job, change):
    (job.parent / "lna.s1p").write_bytes(b"! an amplifier\r# MHz S RI R 50\r\n50 0.1 0.2 ! here\n\r\n200 0.3 0.4")
    change(job, "impedance_ohm = 100.0", 'file = "lna.s1p"')
    outcome = command("inspect", job)
    assert outcome.code == 0, outcome.all
    assert "lna.s1p" in outcome.out


def test_negative_resistance__is_refused_or_where_asked_for_doubted(command, job, change):
    change(job, "impedance_ohm = 100.0", "impedance_ohm = [-20.0, 5.0]")
    refused = command("inspect", job)
    assert refused.code == 2
    assert "negative" in refused.err
    change(job, "impedance_ohm = [-20.0, 5.0]", "impedance_ohm = [-20.0, 5.0]\nallow_negative_resistance = true")
    doubted = command("inspect", job)
    assert doubted.code == 0, doubted.all
    assert "the resistance is negative" in " ".join(doubted.out.split())
