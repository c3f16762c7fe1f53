"""What tests of figures share: nothing clipped, fonts embedded, pictures as they were. Loaded by path, as tests are no package."""

import os
from pathlib import Path

import matplotlib
import numpy as np

BASELINE = Path(__file__).with_name("baseline")
RESOLUTION = 50  # dots per inch: small files, and hinting of letters does not decide


def undrawn_tick_labels(figure):
    """Ids of tick labels that exist but stand beyond the axis limits."""
    idle = set()
    for axis in (axis for ax in figure.axes for axis in (ax.xaxis, ax.yaxis)):
        low, high = sorted(axis.get_view_interval())
        for tick in axis.get_major_ticks() + axis.get_minor_ticks():
            if not low <= tick.get_loc() <= high:
                idle |= {id(tick.label1), id(tick.label2)}
    return idle


def drawn_texts(figure):
    """Texts that are drawn, with their extents."""
    figure.canvas.draw()
    idle = undrawn_tick_labels(figure)
    texts = [t for t in figure.findobj(matplotlib.text.Text) if t.get_visible() and t.get_text().strip() and id(t) not in idle]
    return [(t, t.get_window_extent()) for t in texts]


def assert_inside_canvas(figure):
    """Every text that is drawn lies inside the canvas."""
    found, canvas = drawn_texts(figure), figure.bbox
    assert found
    for text, box in found:
        assert canvas.x0 <= box.x0 and box.x1 <= canvas.x1 and canvas.y0 <= box.y0 and box.y1 <= canvas.y1, (text.get_text(), box)


def assert_nothing_overlaps(figure, allowed=0.15):
    """No two texts cover each other by more than a share of the smaller one's box (boxes hold the line's leading too)."""
    found = [(t, b) for t, b in drawn_texts(figure) if t.get_rotation() % 90 == 0]
    for i, (one, a) in enumerate(found):
        for other, b in found[i + 1 :]:
            width, height = min(a.x1, b.x1) - max(a.x0, b.x0), min(a.y1, b.y1) - max(a.y0, b.y0)
            if width > 0 and height > 0:
                share = width * height / min(a.width * a.height, b.width * b.height)
                assert share < allowed, (one.get_text(), other.get_text(), share)


def picture(figure):
    """Return a figure as an (h, w, 3) array of grey values from 0 to 1."""
    import io

    from matplotlib.image import imread

    out = io.BytesIO()
    figure.savefig(out, format="png", dpi=RESOLUTION)
    out.seek(0)
    return imread(out)[..., :3]


def difference_from_baseline(figure, name, *, store=True):
    """Root mean square difference from the stored picture, blurred over three dots; MUFITTER_NEW_PICTURES=1 stores it anew."""
    from matplotlib.image import imread, imsave
    from scipy.ndimage import uniform_filter

    now, path = picture(figure), BASELINE / f"{name}.png"
    if store and os.environ.get("MUFITTER_NEW_PICTURES"):
        BASELINE.mkdir(exist_ok=True)
        imsave(path, now)
    then = imread(path)[..., :3]
    assert now.shape == then.shape, (now.shape, then.shape)
    blurred = [uniform_filter(image.astype(float), (3, 3, 1)) for image in (now, then)]
    return float(np.sqrt(np.mean((blurred[0] - blurred[1]) ** 2)))
