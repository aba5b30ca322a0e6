"""Axes to bytes that depend on nothing but what is drawn, and bytes to files, whole or not."""

from __future__ import annotations

import contextlib
import io
import os
import tempfile
from pathlib import Path
from typing import TYPE_CHECKING, Any

from embersift.errors import OutputError

if TYPE_CHECKING:
    from matplotlib.axes import Axes

__all__ = ["ENDINGS", "figure_bytes", "replace_file"]

ENDINGS = (".png", ".pdf", ".svg")

# what would otherwise carry the hour of drawing
_METADATA: dict[str, dict[str, Any]] = {
    "png": {"Software": "embersift"},
    "pdf": {"CreationDate": None, "Creator": "embersift"},
    "svg": {"Date": None, "Creator": "embersift"},
}


def figure_bytes(ax: Axes, form: str) -> bytes:
    """The figure of `ax` as png, pdf or svg."""
    import matplotlib

    figure = ax.get_figure(root=True)
    assert figure is not None
    stream = io.BytesIO()
    # ids in an SVG are random without a salt; hatch lines are a global setting
    with matplotlib.rc_context({"svg.hashsalt": "embersift", "pdf.fonttype": 42}):
        figure.savefig(stream, format=form, dpi=160, metadata=_METADATA[form])
    return stream.getvalue()


def replace_file(target: Path, content: bytes, *, overwrite: bool) -> Path:
    """Write a file under another name first, so that no reader ever meets half of it.

    Raises
    ------
    OutputError
        The file exists and may not be replaced, or cannot be written.
    """
    if target.exists() and not overwrite:
        raise OutputError(
            f"{target}: exists already. Choose another name, or allow replacing it (--overwrite)."
        )
    try:
        handle, name = tempfile.mkstemp(prefix=f".{target.name}.", dir=target.parent)
    except OSError as error:
        raise OutputError(
            f"{target}: cannot be written ({error.strerror}). Choose a folder that exists and "
            "that you may write to."
        ) from None
    try:
        with os.fdopen(handle, "wb") as stream:
            stream.write(content)
        mask = os.umask(0)
        os.umask(mask)
        os.chmod(name, 0o666 & ~mask)
        os.replace(name, target)
    except OSError as error:
        raise OutputError(f"{target}: cannot be written ({error.strerror}).") from None
    finally:
        with contextlib.suppress(FileNotFoundError):
            os.unlink(name)
    return target
