"""The text header of a stored file, in the user block that HDF5 leaves to its owner.

The first 1024 bytes of the file are this text, padded with spaces; the HDF5 file proper starts after them,
and any HDF5 reader skips them by itself.  The text names the unit and holds a SHA-256 over the whole file,
taken with the 64 digits of the sum itself as zeros.  So one changed bit anywhere, in the numbers, in HDF5's
own structures or in this text, is seen before HDF5 is asked to make sense of the file.
"""

from __future__ import annotations

import hashlib
import re
from dataclasses import dataclass
from io import FileIO

USER_BLOCK_SIZE = 1024
"""[bytes]; HDF5 asks for a power of two from 512."""

MAGIC = "elbowroom-unit 1"
"""First line of every stored file; the number is the version of this header.  A change of it must also change
the name of the folder that :class:`elbowroom.store.hdf5.Hdf5Store` uses, so that two versions never meet."""

_NOTE = (
    f"An HDF5 file begins at byte {USER_BLOCK_SIZE}; any HDF5 reader opens this file as it stands.\n"
    "sha256 is over the whole file, with its own 64 digits as zeros.\n"
)
_ZEROS = b"0" * 64
_TEXT = re.compile(
    rf"{MAGIC}\nschema ([a-z][a-z0-9-]*)\nschema-version ([1-9][0-9]*)\nkey ([0-9a-f]{{64}})\n"
    r"length ([1-9][0-9]*)\nsha256 ([0-9a-f]{64})\n"
)
_CHUNK = 1 << 20


class NotAUnit(Exception):
    """A file is not what its name says; the message says why.  Never leaves the store package."""


@dataclass(frozen=True)
class Header:
    """The fields of a header.

    Parameters
    ----------
    schema_name, schema_version : str, int
        What the record looks like.
    key : str
        Content key, 64 hexadecimal digits.
    length : int
        Length of the whole file [bytes].
    sha256 : str
        Sum over the whole file, 64 hexadecimal digits.
    """

    schema_name: str
    schema_version: int
    key: str
    length: int
    sha256: str = "0" * 64

    def to_bytes(self) -> bytes:
        """Return the user block, uint8 (1024,) as bytes."""
        text = (
            f"{MAGIC}\nschema {self.schema_name}\nschema-version {self.schema_version}\nkey {self.key}\n"
            f"length {self.length}\nsha256 {self.sha256}\n{_NOTE}"
        )
        return text.encode("ascii").ljust(USER_BLOCK_SIZE - 1) + b"\n"


def read_header(file: FileIO, size: int) -> Header:
    """Return the header of an open file, after checking its form and the length of the file only.

    Parameters
    ----------
    file : unbuffered binary file
        Read from its start.
    size : int
        Length of the file [bytes].

    Returns
    -------
    Header
        The fields as written; whether they are true to the file only :func:`sum_of` tells.

    Raises
    ------
    NotAUnit
        If the file is too short, has another beginning or another length than it says.
    OSError
        If the file cannot be read.
    """
    file.seek(0)
    block = file.read(USER_BLOCK_SIZE)
    if len(block) < USER_BLOCK_SIZE:
        msg = f"{len(block)} bytes long, shorter than the header of a stored unit ({USER_BLOCK_SIZE} bytes)"
        raise NotAUnit(msg)
    match = _TEXT.match(block.decode("latin-1"))
    if match is None:
        msg = f"does not begin with the header of a stored unit ({MAGIC!r}), but with {bytes(block[:24])!r}"
        raise NotAUnit(msg)
    name, version, key, length, digest = match.groups()
    # the numbers may be damaged digits: compare text with text before trusting them as numbers
    if length != str(size):
        msg = f"{size} bytes long where its header says {length[:20]}"
        raise NotAUnit(msg)
    header = Header(name, int(version[:12]), key, size, digest)
    if header.to_bytes() != block:
        msg = "damaged header"
        raise NotAUnit(msg)
    return header


def sum_of(file: FileIO, header: Header) -> str:
    """Return the SHA-256 of an open file as its header should hold it.

    Parameters
    ----------
    file : unbuffered binary file
        Read to its end from byte 1024.
    header : Header
        Hashed with its sum as zeros in place of the first 1024 bytes.

    Returns
    -------
    str
        64 hexadecimal digits.

    Raises
    ------
    OSError
        If the file cannot be read.
    """
    block = header.to_bytes().replace(f"sha256 {header.sha256}\n".encode(), b"sha256 " + _ZEROS + b"\n", 1)
    digest = hashlib.sha256(block)
    file.seek(USER_BLOCK_SIZE)
    while chunk := file.read(_CHUNK):
        digest.update(chunk)
    return digest.hexdigest()
