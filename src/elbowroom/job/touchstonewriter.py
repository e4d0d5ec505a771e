"""Writing Touchstone files, versions 1 and 2; `elbowroom.job.touchstone` reads them and names the sources."""

from __future__ import annotations

from pathlib import Path

import numpy as np

from elbowroom.base.arrays import ComplexArray, FloatArray
from elbowroom.base.errors import ExportError
from elbowroom.job.files import written_whole
from elbowroom.job.tomlfile import counted
from elbowroom.job.touchstone import PARAMETERS, PortMatrices, ports_by_name


def write_touchstone(path: str | Path, data: PortMatrices, *, version: int = 1) -> None:
    """Write port matrices as a Touchstone file, real and imaginary parts to the last digit, frequencies in Hz.

    Parameters
    ----------
    path : str or Path
        The file; it appears under this name only when complete.  Its name must end in ``.s2p`` and the like, with the
        number of ports; version 2 may also end in ``.ts``.
    data : PortMatrices
        What to write; comments go above the data.
    version : 1 or 2, optional
        Version 1 has a single reference resistance and Z and Y normalised to it; version 2 has one a port and plain ohms.

    Raises
    ------
    ExportError
        If name, version or numbers do not fit, or the file cannot be written.
    """
    target = Path(path)
    frequency, matrices = np.asarray(data.frequency_hz, dtype=float), np.asarray(data.matrices, dtype=complex)
    reference = np.asarray(data.reference_ohm, dtype=float)
    fault = _writing_fault(target, data.parameter, frequency, matrices, reference, version)
    if fault:
        msg = f"cannot write {target}: {fault}"
        raise ExportError(msg)
    n = matrices.shape[1]
    comments = [f"! {' '.join(line.split())}" for comment in data.comments for line in comment.splitlines()]
    option = f"# Hz {data.parameter} RI R {float(reference[0])!r}"
    if version == 1:
        scale = {"S": 1.0, "Z": 1.0 / reference[0], "Y": reference[0]}[data.parameter]
        head, foot, matrices = [*comments, option], [], matrices * scale
        if n == 2:
            matrices = matrices.transpose(0, 2, 1)
    else:
        head = [
            *comments,
            "[Version] 2.0",
            option,
            f"[Number of Ports] {n}",
            *(["[Two-Port Data Order] 12_21"] if n == 2 else []),
            f"[Number of Frequencies] {frequency.size}",
            "[Reference] " + " ".join(repr(float(r)) for r in reference),
            "[Matrix Format] Full",
            "[Network Data]",
        ]
        foot = ["[End]"]
    with written_whole(target) as temporary, temporary.open("w", encoding="ascii", errors="replace", newline="\n") as file:
        file.writelines(line + "\n" for line in head)
        for f, matrix in zip(frequency, matrices, strict=True):
            # a row a line, four pairs at most; two ports share a line
            rows = [matrix.ravel()] if n <= 2 else [row[k : k + 4] for row in matrix for k in range(0, n, 4)]
            for i, row in enumerate(rows):
                numbers = " ".join(f"{float(v.real)!r} {float(v.imag)!r}" for v in row)
                file.write((f"{float(f)!r} " if i == 0 else "  ") + numbers + "\n")
        file.writelines(line + "\n" for line in foot)


def _writing_fault(
    target: Path, parameter: str, frequency: FloatArray, matrices: ComplexArray, reference: FloatArray, version: int
) -> str:
    if version not in (1, 2):
        return f"version {version!r}: expected 1 or 2"
    if parameter not in PARAMETERS:
        return f"parameter {parameter!r}: expected S, Y or Z"
    n = matrices.shape[1] if matrices.ndim == 3 else 0
    if n == 0 or matrices.shape != (frequency.size, n, n) or reference.shape != (n,) or frequency.size == 0:
        return (
            f"expected matrices (F, P, P), F frequencies and P references, got {matrices.shape}, {frequency.shape} "
            f"and {reference.shape}"
        )
    if not all(np.all(np.isfinite(each)) for each in (frequency, matrices, reference)) or np.any(reference <= 0.0):
        return "expected finite numbers and positive reference resistances"
    if frequency[0] < 0.0 or np.any(np.diff(frequency) <= 0.0):
        return "expected frequencies of zero or more that rise"
    if ports_by_name(target) != n and not (version == 2 and target.suffix.lower() == ".ts"):
        return f"the name must end in .s{n}p, as the file has {counted(n, 'port')}"
    if version == 1 and np.any(reference != reference[0]):
        return "ports refer to different resistances, which only version 2 can say"
    return ""
