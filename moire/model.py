"""The records that flow through the house, from a scan to a report.

All are frozen, slotted and keyword-only. Arrays live only in `Scan` and in the
floor-1 records; everything from `Line` to `Mending` serialises as it stands.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

Kind = Literal[
    "halftone",
    "alias",
    "rosette",
    "weave",
    "banding",
    "block-grid",
    "laid-lines",
    "stochastic",
    "display-grid",
    "content",
    "unexplained",
]
Verdict = Literal["sound", "mendable", "rescan", "refer", "unreadable"]
Ink = Literal["cyan", "magenta", "yellow", "black", "unknown"]
PpiSource = Literal["option", "file"]
WarpRuns = Literal["vertical", "horizontal"]
WeavePattern = Literal["plain", "basket", "twill", "satin", "knit", "unknown"]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Scan:
    """One page of pixels with what is known about its capture.

    Attributes
    ----------
    pixels : ndarray, shape (rows, columns) or (rows, columns, channels)
        uint8 or uint16, read-only. Channels are grey, RGB or CMYK, alpha kept apart.
    mode : {"grey", "rgb", "cmyk"}
        What the channels mean. CMYK values are ink amounts, 0 = no ink.
    bit_depth : int
        Bits per channel of the file: 1, 8 or 16 (1-bit pixels are held as 0 and 255).
    ppi : (float, float) or None
        Sampling rate along x and y. None when neither given nor credible in the file.
    ppi_source : {"option", "file"} or None
    ppi_in_file : (float, float) or None
        As stored, even where it is a placeholder such as 72.
    alpha : ndarray, shape (rows, columns), or None
    icc : bytes
        ICC profile, empty if none.
    name : str
        File name, without folder.
    sha256 : str
        Digest of the file's bytes; of the pixels for a scan made in memory.
    jpeg : bool
        Whether the pixels came through JPEG.
    page : int
        Page of a multi-page file, from 1.
    """

    pixels: NDArray[Any]
    mode: Literal["grey", "rgb", "cmyk"]
    bit_depth: int
    ppi: tuple[float, float] | None = None
    ppi_source: PpiSource | None = None
    ppi_in_file: tuple[float, float] | None = None
    alpha: NDArray[Any] | None = None
    icc: bytes = b""
    name: str = ""
    sha256: str = ""
    jpeg: bool = False
    page: int = 1

    @property
    def height_px(self) -> int:
        return int(self.pixels.shape[0])

    @property
    def width_px(self) -> int:
        return int(self.pixels.shape[1])

    @property
    def channels(self) -> int:
        return 1 if self.pixels.ndim == 2 else int(self.pixels.shape[2])

    @property
    def full_scale(self) -> int:
        """Largest code value that the pixel type holds."""
        return 255 if self.pixels.dtype == np.uint8 else 65535


@dataclass(frozen=True, slots=True, kw_only=True)
class Line:
    """One spectral line: a harmonic of a pattern, as observed on the sampling grid.

    ``fx_cpp`` and ``fy_cpp`` are cycles per pixel (fy down the page), ``sigma_cpp`` the
    standard uncertainty of each, ``amplitude`` the peak L* swing where the pattern is
    present, ``snr_db`` the line over its local background, ``order`` its integers on the
    pattern's own lattice.
    """

    fx_cpp: float
    fy_cpp: float
    sigma_cpp: float
    amplitude: float
    snr_db: float
    order: tuple[int, int] | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Screen:
    """One ink's halftone lattice, with standard uncertainties."""

    ruling_lpi: float
    ruling_lpi_sigma: float
    ruling_lpcm: float
    angle_deg: float
    angle_deg_sigma: float
    ink: Ink
    shape: Literal["dot", "line"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Weave:
    """A cloth's thread lattice; a knit has its wales as ends and its courses as picks.

    ``structure`` names the weave in words, ``skew_deg`` how far the weft rises to the right of
    square with the warp, ``bow`` the depth of its arc over the width. Ranges leave out a twentieth
    of the cloth at either end; ``places_per_cm`` are (ends, picks) at five places; maps are rows of
    cells from the top, null off the cloth.
    """

    ends_per_cm: float
    picks_per_cm: float
    sigma_per_cm: float
    ends_per_inch: float
    picks_per_inch: float
    pattern: WeavePattern
    skew_deg: float
    structure: str = ""
    ends_sigma_per_cm: float | None = None
    picks_sigma_per_cm: float | None = None
    bow: float | None = None
    ends_range_per_cm: tuple[float, float] | None = None
    picks_range_per_cm: tuple[float, float] | None = None
    places_per_cm: tuple[tuple[float, float], ...] = ()
    ends_map_per_cm: tuple[tuple[float | None, ...], ...] = ()
    picks_map_per_cm: tuple[tuple[float | None, ...], ...] = ()


@dataclass(frozen=True, slots=True, kw_only=True)
class Candidate:
    """One true screen or cloth that would look like the observed one on this sampling grid.

    Of a cloth ``ruling_lpi``, ``angle_deg`` and ``order`` are those of its ends.
    """

    ruling_lpi: float
    angle_deg: float
    order: tuple[int, int]
    probability: float
    ends_per_cm: float | None = None
    picks_per_cm: float | None = None
    structure: str = ""


@dataclass(frozen=True, slots=True, kw_only=True)
class Finding:
    """One periodic pattern, its cause and the evidence for it.

    Fields that do not apply are None or empty. ``visibility`` is contrast over the eye's
    threshold at the stated viewing condition, ``coverage`` the share of the page that
    carries the pattern, ``regions`` boxes ``(x, y, width, height)`` in pixels, ``drift`` the
    share by which its frequency changes over the page (0 where one frequency holds it all).
    """

    kind: Kind
    confidence: float
    visibility: float
    coverage: float
    regions: tuple[tuple[int, int, int, int], ...]
    lines: tuple[Line, ...]
    period_px: float
    period_mm: float | None = None
    screen: Screen | None = None
    weave: Weave | None = None
    candidates: tuple[Candidate, ...] = ()
    settled: bool = True
    drift: float = 0.0
    parents: tuple[int, ...] = ()
    evidence: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True, kw_only=True)
class Viewing:
    """How the scan will be looked at, and the model of the eye that judges it."""

    condition: Literal["monitor", "print"]
    distance_mm: float
    monitor_ppi: float
    model: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Examination:
    """Everything found in one scan."""

    format: str = "moire.examination"
    version: int = 1
    software: str
    file: str
    sha256: str
    width_px: int
    height_px: int
    channels: int
    bit_depth: int
    ppi: tuple[float, float] | None
    ppi_source: PpiSource | None
    ppi_in_file: tuple[float, float] | None
    viewing: Viewing
    verdict: Verdict
    visibility: float
    advice: tuple[str, ...]
    findings: tuple[Finding, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class Removal:
    """One step of a recipe: the lattice or line that a filter takes out.

    ``method`` is ``descreen`` for a screen with harmonics (two generators ``(fx, fy)`` in
    cycles per pixel) or ``notch`` for isolated lines (one vector for each line). ``beside_cpp`` are
    strong lines that stay and must not be taken for these: a weave's own, beside its beats.
    """

    kind: Kind
    method: Literal["descreen", "notch"]
    vectors_cpp: tuple[tuple[float, float], ...]
    ink: Ink = "unknown"
    beside_cpp: tuple[tuple[float, float], ...] = ()


@dataclass(frozen=True, slots=True, kw_only=True)
class Recipe:
    """A whole remedy, enough to repeat it on the same input byte for byte."""

    format: str = "moire.recipe"
    version: int = 1
    software: str
    ppi: tuple[float, float] | None
    strength: float
    quick: bool
    to_ppi: float | None
    removals: tuple[Removal, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class LineRemoved:
    """A line's level before and after, in dB over its local background."""

    fx_cpp: float
    fy_cpp: float
    kind: Kind
    before_db: float
    after_db: float
    removed_db: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Measures:
    """What a mending removed and what it kept."""

    lines: tuple[LineRemoved, ...]
    visibility_before: float
    visibility_after: float
    edge_energy_ratio: float | None
    edge_width_before_px: float | None
    edge_width_after_px: float | None
    colour_shift_mean: float
    colour_shift_max: float
    untouched_share: float
    untouched_area: float
    clipped_share: float


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Mending:
    """A derivative and the proof of what was done to make it."""

    scan: Scan
    before: Examination
    after: Examination
    recipe: Recipe
    measures: Measures
    worst_places: tuple[tuple[int, int], ...] = field(default=())
