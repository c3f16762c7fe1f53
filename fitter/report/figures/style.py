"""How figures look, at the size they are printed, and how they are saved."""

from __future__ import annotations

import os
import tempfile
from collections.abc import Mapping, Sequence
from pathlib import Path

from fitter.errors import InputError

__all__ = ["COLOURS", "DOUBLE", "GREY", "LEVELS", "SINGLE", "STYLE", "new_figure", "save_figure", "styled", "width_inches"]

SINGLE, DOUBLE = 3.5, 7.1  # inches: one and two journal columns
LEVELS = (0.683, 0.954)  # probability inside the contours
# Distinct in hue and in lightness, so that they survive colour blindness and a grey printer.
COLOURS = ("#1f4e9c", "#d9730d", "#2a9d8f", "#a23b72", "#7a5c00", "#5b5f97")
GREY = "#8c8c8c"
_RESOLUTION = 200  # dots per inch of the PNG

STYLE: dict[str, object] = {
    "font.family": "STIXGeneral",
    "mathtext.fontset": "stix",
    "font.size": 9,
    "axes.titlesize": 9,
    "axes.labelsize": 9,
    "xtick.labelsize": 8,
    "ytick.labelsize": 8,
    "legend.fontsize": 8,
    "legend.frameon": False,
    "axes.linewidth": 0.6,
    "lines.linewidth": 1.1,
    "xtick.direction": "in",
    "ytick.direction": "in",
    "xtick.top": True,
    "ytick.right": True,
    "xtick.major.width": 0.6,
    "ytick.major.width": 0.6,
    "xtick.minor.width": 0.4,
    "ytick.minor.width": 0.4,
    "xtick.major.size": 3,
    "ytick.major.size": 3,
    "xtick.minor.size": 1.6,
    "ytick.minor.size": 1.6,
    "pdf.fonttype": 42,  # TrueType, embedded: journals refuse Type 3
    "ps.fonttype": 42,
    "svg.fonttype": "path",
    "text.usetex": False,
    "savefig.facecolor": "white",
    "figure.facecolor": "white",
}


def styled(style: str | Path | Mapping | None = None):
    """Return a context in which figures are drawn and saved in the house style.

    Parameters
    ----------
    style : path or mapping, optional
        A matplotlib style sheet, its name, or settings, laid over the house style.

    Raises
    ------
    fitter.errors.InputError
        If the style sheet cannot be read or holds an unknown setting.
    """
    import matplotlib
    from matplotlib import style as matplotlib_style

    settings = dict(STYLE)
    if style is not None:
        try:
            with matplotlib.rc_context():
                # Settings from a sheet are collected by applying it to a throw-away context.
                before = matplotlib.rcParams.copy()
                matplotlib_style.use(dict(style) if isinstance(style, Mapping) else str(style))
                changed = {k: v for k, v in matplotlib.rcParams.items() if k != "backend" and v != before[k]}
            settings.update(changed)
        except (OSError, KeyError, ValueError) as error:
            raise InputError(
                "this figure style cannot be used",
                file=None if isinstance(style, Mapping) else style,
                value=str(error),
                cure="Give a matplotlib style sheet (*.mplstyle).",
            ) from error
    return matplotlib.rc_context(settings)


def width_inches(width: str | float) -> float:
    """Return a figure width in inches from ``single``, ``double`` or a number of inches."""
    named = {"single": SINGLE, "double": DOUBLE}
    if isinstance(width, str):
        if width not in named:
            raise InputError("unknown figure width", value=width, cure="Use single, double or a number of inches.")
        return named[width]
    if not 1 <= float(width) <= 30:
        raise InputError("a figure width must lie between 1 and 30 inches", value=width)
    return float(width)


def new_figure(width: str | float = "single", ratio: float = 0.75, *, height: float | None = None):
    """Return an empty Figure of a printed width; no window, no display, no global state.

    Parameters
    ----------
    width : {"single", "double"} or float
        Column, or inches.
    ratio : float
        Height over width.
    height : float, optional
        Inches, instead of the ratio.
    """
    from matplotlib.figure import Figure

    inches = width_inches(width)
    return Figure(figsize=(inches, height if height is not None else ratio * inches))


def save_figure(figure, path: Path, caption: str = "", *, formats: Sequence[str] = ("pdf", "png"), style=None) -> list[Path]:
    """Write a figure in each format, and its caption as text beside it, each atomically.

    Parameters
    ----------
    figure : matplotlib.figure.Figure
    path : Path
        Without suffix: ``figures/corner`` makes corner.pdf, corner.png and corner.txt.
    caption : str
        What a reader must know: levels, intervals, bins.
    formats : sequence of {"pdf", "png", "svg", "eps"}
    style : optional
        As for :func:`styled`.

    Returns
    -------
    list of Path
        The files written.
    """
    path = Path(path)
    path.parent.mkdir(parents=True, exist_ok=True)
    written = []
    with styled(style):
        for fmt in formats:
            if fmt not in ("pdf", "png", "svg", "eps"):
                raise InputError("unknown figure format", value=fmt, cure="Use pdf, png, svg or eps.")
            # No creation date: the same fit gives the same file.
            metadata = {"pdf": {"CreationDate": None}, "svg": {"Date": None}}.get(fmt)
            target = path.with_name(f"{path.name}.{fmt}")
            _atomically(target, lambda f, fmt=fmt, m=metadata: figure.savefig(f, format=fmt, dpi=_RESOLUTION, metadata=m))
            written.append(target)
    if caption:
        target = path.with_name(f"{path.name}.txt")
        _atomically(target, lambda f: f.write((caption.strip() + "\n").encode()))
        written.append(target)
    return written


def _atomically(target: Path, write) -> None:
    """Write to a temporary file in the same folder, then rename."""
    descriptor, temporary = tempfile.mkstemp(prefix=f".{target.name}.", dir=target.parent)
    try:
        with os.fdopen(descriptor, "wb") as stream:
            write(stream)
            stream.flush()
            os.fsync(stream.fileno())
        os.chmod(temporary, 0o666 & ~_umask())
        os.replace(temporary, target)
    except BaseException:
        os.unlink(temporary)
        raise


def _umask() -> int:
    """The process's file mode mask; reading it means setting it."""
    mask = os.umask(0)
    os.umask(mask)
    return mask
