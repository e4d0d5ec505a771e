import os
import threading

import pytest

from elbowroom.base.inputs import LARGEST_INPUT_BYTES, read_input, real_path


def test_read_input__gives_every_byte(tmp_path):
    (tmp_path / "a").write_bytes(bytes(range(256)) * 9)
    assert read_input(tmp_path / "a") == bytes(range(256)) * 9


def test_read_input__does_not_wait_for_a_pipe_without_writer(tmp_path):
    os.mkfifo(tmp_path / "pipe")
    assert read_input(tmp_path / "pipe") == b""


def test_read_input__reads_a_pipe_to_its_end():
    out, into = os.pipe()

    def write():
        with open(into, "wb") as end:
            end.write(b"x" * 200_000)

    writer = threading.Thread(target=write)
    writer.start()
    assert read_input(f"/dev/fd/{out}") == b"x" * 200_000
    writer.join()
    os.close(out)


def test_read_input__refuses_folders_and_what_has_no_end(tmp_path):
    with pytest.raises(IsADirectoryError):
        read_input(tmp_path)
    with (tmp_path / "large").open("wb") as file:
        file.truncate(LARGEST_INPUT_BYTES + 1)
    with pytest.raises(OSError, match="larger than 64 MiB"):
        read_input(tmp_path / "large")
    with pytest.raises(FileNotFoundError):
        read_input(tmp_path / "absent")


def test_real_path__of_a_link_to_itself_is_a_path(tmp_path):
    (tmp_path / "loop").symlink_to("loop")
    assert real_path(tmp_path / "loop").name == "loop"
    (tmp_path / "link").symlink_to(tmp_path / "target")
    assert real_path(tmp_path / "link") == real_path(tmp_path) / "target"
