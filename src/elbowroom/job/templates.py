"""Starting points: folders with a job, an antenna and a layout that run as they are.

The files are package data below ``template_files``; those of ``demo`` also lie in the repository's ``demo_data``, and those of
``log-periodic`` in its folder of that name.
"""

from __future__ import annotations

from importlib.resources import files
from pathlib import Path

from elbowroom.base.errors import ExportError, JobFileError

TEMPLATES = {
    "small": "seven antennas, two frequencies, a few seconds",
    "demo": "an invented station of 240 antennas, five frequencies from 60 to 300 MHz, minutes per frequency",
    "log-periodic": "an invented station of 16 log-periodic antennas, three frequencies from 80 to 350 MHz, two or three minutes",
}
"""What there is to start from, and what it is."""


def template_files(name: str) -> dict[str, bytes]:
    """Return the files of a template by file name.

    Raises
    ------
    JobFileError
        If there is no such template.
    """
    if name not in TEMPLATES:
        import difflib

        close = difflib.get_close_matches(name, TEMPLATES, n=1)
        msg = f"no template {name!r}; " + (f"did you mean {close[0]!r}?" if close else f"known: {', '.join(TEMPLATES)}")
        raise JobFileError(msg)
    folder = files("elbowroom.job") / "template_files" / name
    return {item.name: item.read_bytes() for item in sorted(folder.iterdir(), key=lambda item: item.name)}


def write_template(name: str, folder: str | Path) -> list[Path]:
    """Write the files of a template into a folder, which is made if need be.

    Parameters
    ----------
    name : str
        A key of `TEMPLATES`.
    folder : str or Path
        Where to; none of the files may be there yet.

    Returns
    -------
    list of Path
        The files written, the job file first.

    Raises
    ------
    JobFileError
        If there is no such template.
    ExportError
        If a file of that name is there already, or the folder cannot be written.  Nothing is overwritten.
    """
    contents, target = template_files(name), Path(folder)
    there = [file for file in contents if (target / file).exists()]
    if there:
        msg = f"{target}: {', '.join(there)} already there; nothing was written; choose another folder"
        raise ExportError(msg)
    written = []
    try:
        target.mkdir(parents=True, exist_ok=True)
        for file, data in contents.items():
            # mode x: a file that appeared in the meantime is not overwritten either
            with (target / file).open("xb") as out:
                out.write(data)
            written.append(target / file)
    except OSError as cause:
        msg = f"{target}: cannot write the template {name!r}: {cause.strerror or cause}"
        raise ExportError(msg) from cause
    return sorted(written, key=lambda path: path.name != "job.toml")
