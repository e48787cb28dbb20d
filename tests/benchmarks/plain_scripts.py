"""The same job as a script of general-purpose libraries does it: what `scanclean` is timed against.

Each reads a grey page, thresholds it after Sauvola, takes out small components and long lines,
fills holes, finds the boxes of the components and writes the page (Group 4 TIFF), a map of what was
taken out (indexed PNG) and the boxes (JSON).
"""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
from numpy.typing import NDArray
from PIL import Image

from scanclean.ledger import CLASSES, PALETTE

WINDOW, K = 41, 0.2
SMALL, LINE, HOLE = 8, 101, 4  # px

Mask = NDArray[np.bool_]


def pillow_alone(source: Path, folder: Path, page: Mask, classes: NDArray[np.uint8]) -> None:
    """Decode the file and encode the given results, nothing else."""
    with Image.open(source) as image:
        image.convert("L").load()
    _write(folder, page, classes, [])


def scikit_image(source: Path, folder: Path) -> None:
    """Scikit-image, and SciPy where it has the faster function."""
    from scipy import ndimage
    from skimage import filters, measure, morphology

    with Image.open(source) as image:
        grey = np.asarray(image.convert("L"))
    ink = grey < filters.threshold_sauvola(grey, WINDOW, k=K)
    cleaned = morphology.remove_small_objects(ink, max_size=SMALL)
    across = morphology.opening(cleaned, morphology.footprint_rectangle((1, LINE)))
    down = morphology.opening(cleaned, morphology.footprint_rectangle((LINE, 1)))
    cleaned &= ~(across | down)
    holes = ndimage.binary_fill_holes(cleaned) & ~cleaned
    cleaned |= holes & ~morphology.remove_small_objects(holes, max_size=HOLE)
    labels = measure.label(cleaned, connectivity=2)
    # what the layout tells of each: its box, its area and its holes
    regions = [
        (*region.bbox, int(region.area), int(1 - region.euler_number))
        for region in measure.regionprops(labels)
    ]
    _write(folder, cleaned, _map(cleaned, ink), regions)


def opencv(source: Path, folder: Path) -> None:
    """OpenCV in one thread."""
    import cv2

    cv2.setNumThreads(1)
    grey = cv2.imread(str(source), cv2.IMREAD_GRAYSCALE)
    real = grey.astype(np.float32)
    mean = cv2.boxFilter(real, -1, (WINDOW, WINDOW))
    spread = cv2.sqrt(cv2.max(cv2.sqrBoxFilter(real, -1, (WINDOW, WINDOW)) - mean * mean, 0))
    ink = (real < mean * (1 + K * (spread / 128 - 1))).view(np.uint8)
    _, labels, stats, _ = cv2.connectedComponentsWithStats(ink, connectivity=8)
    keep = stats[:, cv2.CC_STAT_AREA] > SMALL
    keep[0] = False
    cleaned = keep.view(np.uint8)[labels]
    across, down = (
        cv2.morphologyEx(cleaned, cv2.MORPH_OPEN, cv2.getStructuringElement(cv2.MORPH_RECT, shape))
        for shape in ((LINE, 1), (1, LINE))
    )
    cleaned = cleaned & ~(across | down)
    _, labels, stats, _ = cv2.connectedComponentsWithStats(1 - cleaned, connectivity=4)
    hole = stats[:, cv2.CC_STAT_AREA] <= HOLE
    hole[0] = False
    cleaned |= hole.view(np.uint8)[labels]
    _, _, stats, _ = cv2.connectedComponentsWithStats(cleaned, connectivity=8)
    boxes = stats[1:, :4].tolist()
    _write(folder, cleaned.view(bool), _map(cleaned.view(bool), ink.view(bool)), boxes)


def _map(cleaned: Mask, ink: Mask) -> NDArray[np.uint8]:
    """What was taken out, as a ledger of specks."""
    taken = ink & ~cleaned
    return cleaned.view(np.uint8) + np.uint8(CLASSES["speck"]) * taken.view(np.uint8)


def _write(
    folder: Path, page: Mask, classes: NDArray[np.uint8], boxes: list[tuple[int, ...]]
) -> None:
    Image.fromarray(~page).save(folder / "page.tif", compression="group4")
    ledger = Image.fromarray(classes, "P")
    ledger.putpalette([value for colour in PALETTE for value in colour])
    ledger.save(folder / "page.ledger.png", compress_level=6)
    (folder / "page.json").write_text(json.dumps(boxes))
