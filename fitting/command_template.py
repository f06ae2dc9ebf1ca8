"""The body of `template`: a blank to fill in, never over an existing file."""

from __future__ import annotations

from importlib.resources import files
from pathlib import Path

import click

from .records import Fault, InputRefused, Place

# kind: files of the templates folder, joined in this order
_PARTS = {"stack": ("stack.toml",), "guide": ("stack.toml", "guide_section.toml"), "prism": ("prism.xlsx",)}
_NEXT = {
    "stack": "Fill it in, then: layerlot predict {out}  and  layerlot fit {out} DATA --out FOLDER",
    "guide": "Fill it in, then: layerlot predict {out}",
    "prism": "Fill it in, then: layerlot inspect {out}",
}


def write_template(kind: str, out: Path | None) -> int:
    """Write the blank; returns the exit status. Raises InputRefused if the file exists or its ending is another's."""
    suffix = Path(_PARTS[kind][0]).suffix
    path = Path(kind + suffix) if out is None else out
    faults = []
    if path.suffix.lower() != suffix:
        was = f"a file ending in {path.suffix or 'nothing'}"
        faults.append(Fault(Place(str(path)), was, f"this blank is a {suffix} file", f"name it with {suffix}"))
    if path.exists():
        remedy = "name another file with --out"
        faults.append(Fault(Place(str(path)), "a file that exists", "nothing is written over", remedy))
    if faults:
        raise InputRefused(faults)
    content = b"\n".join(files("layerlot.templates").joinpath(part).read_bytes() for part in _PARTS[kind])
    try:
        with path.open("xb") as file:
            file.write(content)
    except OSError as error:
        was = f"cannot be written ({error.strerror})"
        raise InputRefused([Fault(Place(str(path)), was, "an existing folder is required", "check the path")]) from None
    click.echo(f"Written: {path}\n{_NEXT[kind].format(out=path)}")
    return 0
