"""How figures look, at the size they are printed, and how they are saved."""

from __future__ import annotations

import io
import os
import tempfile
from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import contextmanager, nullcontext
from contextvars import ContextVar
from functools import partial, wraps
from pathlib import Path
from typing import TYPE_CHECKING, Any, BinaryIO, ParamSpec

from fitter.errors import InputError
from fitter.report.citations import SHORT
from fitter.report.prose import plain

if TYPE_CHECKING:
    from matplotlib.figure import Figure

__all__ = [
    "COLOURS",
    "DOUBLE",
    "GREY",
    "LEVELS",
    "SINGLE",
    "STYLE",
    "in_style",
    "new_figure",
    "save_figure",
    "shown_in_notebooks",
    "styled",
    "width_inches",
]

SINGLE, DOUBLE = 3.5, 7.1  # inches: one and two journal columns
LEVELS = (0.683, 0.954)  # probability inside the contours
# Chosen so that any two stay apart for every kind of colour blindness (a test says how far), and neighbours on a grey printer.
COLOURS = ("#1f4e9c", "#d9730d", "#57b5a6", "#59093b", "#9898d9", "#735f3f")
GREY = "#8c8c8c"
_active = ContextVar("style in force", default=False)
_P = ParamSpec("_P")
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


@contextmanager
def styled(style: str | Path | Mapping | None = None) -> Iterator[None]:
    """Draw and save figures in the house style while this context is open.

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

    settings = {**STYLE, **_settings_of(style)}
    token = _active.set(True)
    try:
        with matplotlib.rc_context(settings):
            yield
    finally:
        _active.reset(token)


def in_style(draw: Callable[_P, Figure]) -> Callable[_P, Figure]:
    """Decorate a function that returns a Figure: it draws in the house style unless a style is in force already."""

    @wraps(draw)
    def drawn(*args: _P.args, **options: _P.kwargs) -> Figure:
        if _active.get():
            return draw(*args, **options)
        with styled():
            figure = draw(*args, **options)
            figure.draw_without_rendering()  # ticks are made on first drawing, with the settings of that moment
            return figure

    return drawn


def _settings_of(style: str | Path | Mapping | None) -> dict:
    """Settings of a style sheet, a named style or a mapping, checked."""
    if style is None:
        return {}
    import matplotlib
    import matplotlib.style

    try:
        if isinstance(style, Mapping):
            given = dict(style)
        elif str(style) in matplotlib.style.library:
            given = dict(matplotlib.style.library[str(style)])
        else:
            given = dict(matplotlib.rc_params_from_file(str(style), fail_on_error=True, use_default_template=False))
        given.pop("backend", None)
        with matplotlib.rc_context(given):
            return given
    except (OSError, KeyError, ValueError) as error:
        raise InputError(
            "this figure style cannot be used",
            file=None if isinstance(style, Mapping) else style,
            value=str(error),
            cure="Give a matplotlib style sheet (*.mplstyle).",
        ) from error


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


def new_figure(width: str | float = "single", ratio: float = 0.75, *, height: float | None = None) -> Figure:
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


def save_figure(
    figure: Figure, path: Path, caption: str = "", *, formats: Sequence[str] = ("pdf", "png"), style: str | Path | Mapping | None = None
) -> list[Path]:
    """Write a figure in each format, and its caption as text beside it, each atomically.

    Parameters
    ----------
    figure : matplotlib.figure.Figure
    path : Path
        Without suffix: ``figures/corner`` makes corner.pdf, corner.png and corner.txt.
    caption : str
        What a reader must know: levels, intervals, bins; may hold marks (`fitter.report.prose`).
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
    with nullcontext() if _active.get() and style is None else styled(style):
        for fmt in formats:
            if fmt not in ("pdf", "png", "svg", "eps"):
                raise InputError("unknown figure format", value=fmt, cure="Use pdf, png, svg or eps.")
            # No creation date: the same fit gives the same file.
            metadata = {"pdf": {"CreationDate": None}, "svg": {"Date": None}}.get(fmt)
            target = path.with_name(f"{path.name}.{fmt}")
            _atomically(target, partial(figure.savefig, format=fmt, dpi=_RESOLUTION, metadata=metadata))
            written.append(target)
    if caption:
        target = path.with_name(f"{path.name}.txt")
        _atomically(target, lambda f: f.write((plain(caption, SHORT).strip() + "\n").encode()))
        written.append(target)
    return written


def _atomically(target: Path, write: Callable[[BinaryIO], object]) -> None:
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


def shown_in_notebooks(figure: Figure) -> Figure:
    """Let a notebook show a figure that pyplot does not know of; returns the figure."""
    with_picture: Any = figure  # matplotlib declares no such method
    with_picture._repr_png_ = partial(_png, figure)
    return figure


def _png(figure: Figure) -> bytes:
    stream = io.BytesIO()
    figure.savefig(stream, format="png", dpi=110)
    return stream.getvalue()
