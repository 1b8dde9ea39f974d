"""The shares of land cover and soils in each basin: the curve-number worksheet and what is doubtful about it."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from basinwright.cover.layers import ASSUMED, CoverLayer, SoilLayer
from basinwright.io.rasters import BLOCK_CELLS
from basinwright.schemes import ANY_GROUP, GROUPS, CoverClass, Scheme
from basinwright.terrain.workspace import IN_MEMORY, Workspace

if TYPE_CHECKING:
    from numpy.typing import NDArray


@dataclass(frozen=True)
class Patches:
    """Land cover crossed with soils.

    Parameters
    ----------
    cells : ndarray of int32, shape (nrows, ncols)
        Patch of each cell, from 0; cells with neither cover nor soils have one too.
    cover : tuple of str or None
        Class code of each patch, None where the cover layer has none.
    soil : tuple of str or None
        Label of each patch in the soil layer, None where it has none.
    missing : str or None
        The group behind the label `ASSUMED`.
    """

    cells: NDArray[np.int32]
    cover: tuple[str | None, ...]
    soil: tuple[str | None, ...]
    missing: str | None

    def __len__(self) -> int:
        return len(self.cover)


def combine(cover: CoverLayer, soils: SoilLayer, space: Workspace = IN_MEMORY) -> Patches:
    """Cross land cover with soils: one patch for each pair that occurs.

    Parameters
    ----------
    cover, soils : CoverLayer, SoilLayer
        Of one grid.
    space : Workspace
        Where the cells lie, as long as it does.
    """
    kinds = len(soils.labels) + 1
    nrows, ncols = cover.classes.shape
    cells = space.temporary("patches", (nrows, ncols), np.int32)
    counts = np.zeros((len(cover.codes) + 1) * kinds, dtype=np.int64)
    for block in _row_blocks(nrows, ncols):
        cells[block] = (cover.classes[block].astype(np.int32) + 1) * kinds + (soils.groups[block] + 1)
        counts += np.bincount(cells[block].ravel(), minlength=len(counts))
    occurring = np.flatnonzero(counts)
    patch_of_pair = np.full(len(counts), -1, dtype=np.int32)
    patch_of_pair[occurring] = np.arange(len(occurring))
    for block in _row_blocks(nrows, ncols):
        cells[block] = patch_of_pair[cells[block]]
    codes, labels = (None, *cover.codes), (None, *soils.labels)
    return Patches(
        cells,
        tuple(codes[pair // kinds] for pair in occurring),
        tuple(labels[pair % kinds] for pair in occurring),
        soils.missing,
    )


def _row_blocks(nrows: int, ncols: int) -> Iterator[slice]:
    rows = max(1, BLOCK_CELLS // ncols)
    return (slice(first, first + rows) for first in range(0, nrows, rows))


@dataclass(frozen=True)
class CoverShares:
    """The shares of every basin.

    Parameters
    ----------
    rows : dict of ndarray
        The worksheet, by outlet, class and group: ``outlet, cover, soil_group, area_km2, curve_number,
        impervious_pct, source``. Areas sum to the part of the basin that is known.
    curve_number : ndarray, shape (outlets,)
        Area mean over the known part; NaN where nothing is known.
    impervious_pct, open_water_pct : ndarray, shape (outlets,)
        Shares of the known part [%].
    gap_share : ndarray, shape (outlets,)
        Share of the basin without a curve number: no cover, no soils, or values that the tables do not list.
    assumed_share : ndarray, shape (outlets,)
        Share of the basin whose curve number rests on `soils.missing`.
    failed : dict of int to str
        Why an outlet cannot be computed: its gap exceeds the limit.
    flags : list of tuple of int, str and str
        Outlet, flag and message: COVER_GAP, SOILS_ASSUMED.
    """

    rows: dict[str, NDArray[Any]]
    curve_number: NDArray[np.float64]
    impervious_pct: NDArray[np.float64]
    open_water_pct: NDArray[np.float64]
    gap_share: NDArray[np.float64]
    assumed_share: NDArray[np.float64]
    failed: dict[int, str]
    flags: list[tuple[int, str, str]]


@dataclass(frozen=True)
class _Kind:
    """What a patch counts as: a row of the worksheet, or a gap with the reason."""

    entry: CoverClass | None
    group: str
    assumed: bool
    gap: str


@dataclass(frozen=True)
class Impervious:
    """Mapped impervious area, for the classes whose curve numbers include some.

    Parameters
    ----------
    pct : ndarray, shape (outlets, patches)
        Mean impervious share of each patch in each whole basin [%]; NaN where it is not mapped.
    composite : callable
        From pervious curve number and impervious share [%] to the composite curve number.
    """

    pct: NDArray[np.float64]
    composite: Callable[[NDArray[np.float64], NDArray[np.float64]], NDArray[np.float64]]


def cover_shares(
    area_km2: NDArray[np.float64],
    patches: Patches,
    scheme: Scheme,
    gap_limit: float,
    impervious: Impervious | None = None,
) -> CoverShares:
    """Turn the areas of patches by outlet into the worksheet.

    Parameters
    ----------
    area_km2 : ndarray, shape (outlets, patches)
        Area of each patch in each whole basin [km2].
    patches : Patches
        What the patches are.
    scheme : Scheme
        Curve numbers by class.
    gap_limit : float
        Share of a basin without a curve number that is tolerated.
    impervious : Impervious, optional
        Composites the classes whose scheme row has an impervious share from their pervious row.

    Returns
    -------
    CoverShares
        Rows for failed outlets too, as far as they are known.
    """
    kinds = [
        _kind(code, label, patches.missing, scheme) for code, label in zip(patches.cover, patches.soil, strict=True)
    ]
    basin = area_km2.sum(axis=1)
    in_gap = np.array([kind.gap != "" for kind in kinds], dtype=bool)
    assumed = np.array([kind.assumed for kind in kinds], dtype=bool)
    keys, by_key, rows = _worksheet(area_km2, kinds)
    known = by_key.sum(axis=1)
    curve_number = np.array([entry.curve_number_on(group) for entry, group in keys], dtype=np.float64) + 0.0 * by_key
    impervious_pct = np.array([entry.impervious_pct for entry, _ in keys], dtype=np.float64) + 0.0 * by_key
    if impervious is not None:
        _composite(curve_number, impervious_pct, keys, kinds, area_km2, impervious)
        at = np.nonzero(by_key > 0)
        rows["curve_number"], rows["impervious_pct"] = curve_number[at], impervious_pct[at]
    with np.errstate(invalid="ignore", divide="ignore"):
        gap_share = np.where(basin > 0, area_km2[:, in_gap].sum(axis=1) / basin, np.nan)
        assumed_share = np.where(basin > 0, area_km2[:, assumed].sum(axis=1) / basin, np.nan)

    def mean(values: NDArray[np.float64]) -> NDArray[np.float64]:
        with np.errstate(invalid="ignore", divide="ignore"):
            return (by_key * values).sum(axis=1) / known

    failed: dict[int, str] = {}
    flags: list[tuple[int, str, str]] = []
    for outlet in np.flatnonzero(gap_share > 0).tolist():
        message = f"{gap_share[outlet]:.2%} of the basin has no curve number: " + "; ".join(
            _reasons(area_km2[outlet] / basin[outlet], kinds)
        )
        if gap_share[outlet] > gap_limit or known[outlet] == 0:
            failed[outlet] = f"{message}; cover.gap_limit is {gap_limit:.2%}"
        else:
            flags.append((outlet, "COVER_GAP", message))
    for outlet in np.flatnonzero(assumed_share > 0).tolist():
        message = f"group {patches.missing} is assumed on {assumed_share[outlet]:.2%} of the basin"
        flags.append((outlet, "SOILS_ASSUMED", message))
    return CoverShares(
        rows,
        curve_number=mean(curve_number),
        impervious_pct=mean(impervious_pct),
        open_water_pct=mean(np.array([100.0 * entry.open_water for entry, _ in keys], dtype=np.float64)),
        gap_share=gap_share,
        assumed_share=assumed_share,
        failed=failed,
        flags=sorted(flags),
    )


def _kind(code: str | None, label: str | None, missing: str | None, scheme: Scheme) -> _Kind:
    """Say what a patch counts as."""
    if code is None:
        return _Kind(None, "", False, "no land cover")
    entry = scheme.find(code)
    if entry is None:
        return _Kind(None, "", False, f"land-cover value {code!r}, which the scheme does not list")
    if not entry.needs_soil:
        return _Kind(entry, ANY_GROUP, False, "")
    if label is None:
        return _Kind(None, "", False, "no soils")
    if label == ASSUMED and missing is not None:
        return _Kind(entry, missing, True, "")
    if label not in GROUPS:
        return _Kind(None, "", False, f"soils value {label!r}, which soils.groups does not list")
    return _Kind(entry, label, False, "")


def _worksheet(
    area_km2: NDArray[np.float64], kinds: list[_Kind]
) -> tuple[list[tuple[CoverClass, str]], NDArray[np.float64], dict[str, NDArray[Any]]]:
    """Return the classes on groups that occur, their areas by outlet, and the rows of the worksheet."""
    counted = [(kind.entry, kind.group) for kind in kinds if kind.entry is not None]
    order = {entry.code: place for place, (entry, _) in reversed(list(enumerate(counted)))}
    unique = {(entry.code, group): (entry, group) for entry, group in counted}
    keys = sorted(unique.values(), key=lambda key: (order[key[0].code], key[1]))
    column = {(entry.code, group): place for place, (entry, group) in enumerate(keys)}
    by_key = np.zeros((len(area_km2), len(keys)))
    for patch, kind in enumerate(kinds):
        if kind.entry is not None:
            by_key[:, column[kind.entry.code, kind.group]] += area_km2[:, patch]
    outlet, which = np.nonzero(by_key > 0)
    by_column = {
        "cover": [entry.code for entry, _ in keys],
        "soil_group": [group for _, group in keys],
        "curve_number": [entry.curve_number_on(group) for entry, group in keys],
        "impervious_pct": [entry.impervious_pct for entry, _ in keys],
        "source": [entry.source for entry, _ in keys],
    }
    texts = ("cover", "soil_group", "source")
    rows = {name: np.array(v, dtype=object if name in texts else float)[which] for name, v in by_column.items()}
    return keys, by_key, {"outlet": outlet, **rows, "area_km2": by_key[outlet, which]}


def _composite(
    curve_number: NDArray[np.float64],
    impervious_pct: NDArray[np.float64],
    keys: list[tuple[CoverClass, str]],
    kinds: list[_Kind],
    area_km2: NDArray[np.float64],
    impervious: Impervious,
) -> None:
    """Put mapped impervious shares and composite curve numbers in the place of the scheme's, where it has a share."""
    for place, (entry, group) in enumerate(keys):
        if entry.impervious_pct <= 0.0:
            continue
        mine = [
            i
            for i, kind in enumerate(kinds)
            if kind.entry is not None and (kind.entry.code, kind.group) == (entry.code, group)
        ]
        pct, area = impervious.pct[:, mine], area_km2[:, mine]
        mapped = np.where(np.isnan(pct), 0.0, area)
        total = mapped.sum(axis=1)
        fine = total > 0
        mean_pct = (mapped[fine] * np.nan_to_num(pct[fine])).sum(axis=1) / total[fine]
        impervious_pct[fine, place] = mean_pct
        pervious = np.full(mean_pct.size, entry.pervious_curve_number[group])
        curve_number[fine, place] = impervious.composite(pervious, mean_pct)


def _reasons(shares: NDArray[np.float64], kinds: list[_Kind]) -> Iterator[str]:
    """Yield the reasons for a basin's gap with their shares, the largest first."""
    by_reason: dict[str, float] = {}
    for share, kind in zip(shares.tolist(), kinds, strict=True):
        if kind.gap and share > 0:
            by_reason[kind.gap] = by_reason.get(kind.gap, 0.0) + share
    for reason, share in sorted(by_reason.items(), key=lambda item: (-item[1], item[0])):
        yield f"{reason} ({share:.2%})"
