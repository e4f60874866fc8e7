"""What a strip sensor measures in a world, with its faults.

Spread of range: Nguyen, Izadi, Lovell 2012, "Modeling Kinect sensor noise for improved 3D
reconstruction and tracking": 0.0012 + 0.0019 (z - 0.4)^2 metres, and at steep incidence
0.0001 / sqrt(z) theta^2 / (pi/2 - theta)^2 more.  All other faults are judgements, no source; that
dark and steep surfaces fail more often is reported by Kneip et al. 2009.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from learnfilter.core.colour import linear_to_srgb, srgb_to_linear
from learnfilter.core.poses import compose
from learnfilter.core.strip import Strip
from learnfilter.plan.floorplan import DOOR, OPEN, WINDOW
from learnfilter.render.rays import build_scene, cast
from learnfilter.sim.clutter import PERSON_RADIUS_M
from learnfilter.sim.light import lamp
from learnfilter.sim.world import World

# Luminance of linear sRGB, ITU-R BT.709.
LUMINANCE = np.array([0.2126, 0.7152, 0.0722])
# Colour is seen this many times farther than depth; beyond is daylight.
SIGHT = 3.0
DAYLIGHT = np.array([0.9, 0.95, 1.0])
# Incidence the spread's formula is used to; it was measured to about 60 degrees and diverges at 90.
STEEPEST_RAD = np.radians(80)
STEEP_FROM_RAD = np.radians(60)
# A person nearer to the sensor than this steps aside and is not seen.
PERSONAL_SPACE_M = 0.6
# The side rays of a column must differ by so much for its depth to be mixed.
EDGE_M = 0.15


@dataclass(frozen=True)
class Faults:
    """How a sensor errs; shares are chances a reading.

    Attributes:
        sd_m, sd_growth_per_m: spread of range at 0.4 m, and its growth with the square of the rest.
        sd_steep: factor on the spread at steep incidence.
        missing: share missing anyhow.
        missing_dark: more at maximum range on a black surface, growing with the square of range.
        missing_steep: more at grazing incidence, from 60 degrees on.
        burst: chance that a run of columns is dropped from here on, depth and colour.
        burst_columns: mean length of a run.
        short: share that comes back from something before the surface (dust, cables), anywhere.
        mixed: share of readings at an edge that lie between near and far.
        glass_through, glass_none: of glass met: seen through, nothing comes back; else it reflects.
        colour_sd, colour_sd_share: spread of linear colour, and as a share of its value.
    """

    sd_m: float = 0.0012
    sd_growth_per_m: float = 0.0019
    sd_steep: float = 0.0001
    missing: float = 0.01
    missing_dark: float = 0.15
    missing_steep: float = 0.25
    burst: float = 0.004
    burst_columns: float = 3.0
    short: float = 0.02
    mixed: float = 0.3
    glass_through: float = 0.6
    glass_none: float = 0.3
    colour_sd: float = 0.006
    colour_sd_share: float = 0.02


CAMERA = Faults()
# A planar scanner's spread hardly grows with range (common practice, no source).
SCANNER = Faults(sd_m=0.015, sd_growth_per_m=0.0, sd_steep=0.0, missing_dark=0.05)


def sense(
    world: World,
    poses: NDArray[np.float64],
    time_s: NDArray[np.float64],
    strip: Strip,
    rng: np.random.Generator,
    faults: Faults | None = None,
) -> tuple[NDArray[np.float32], NDArray[np.float32]]:
    """Strips seen from the sensor's poses.

    Args:
        world: what stands and walks there.
        poses: [t 3] of the sensor.
        time_s: [t] when; people walk.
        strip: the sensor.
        rng: draws its faults.
        faults: those of a depth camera, or of a scanner where the strip has no colour, if None.

    Returns:
        depth_m [t w], NaN where nothing came back, and sRGB [t w 3], NaN in dropped columns only.
    """
    faults = faults or (CAMERA if strip.has_colour else SCANNER)
    geometry, surface, colour = rng.spawn(3)
    poses = compose(poses, [0.0, 0.0, np.radians(world.conditions.mount_turn_deg)])
    view = _look(world, poses, time_s, strip, faults, geometry)
    depth = _measure_range(view, world, strip, faults, surface)
    rgb = _measure_colour(view, world, faults, colour)
    dropped = _bursts(depth.shape, world, faults, surface) | np.isin(np.arange(strip.columns), strip.blind)
    depth[dropped], rgb[dropped] = np.nan, np.nan
    return depth.astype(np.float32), rgb.astype(np.float32)


@dataclass(frozen=True, eq=False)
class _View:
    """What rays meet, three a column [t w 3]: along its bearing and a quarter step to both sides.

    `range_m` is inf where nothing is in sight, `radiance` [t w 3 3] linear, `lost` whether glass
    sent nothing back.
    """

    range_m: NDArray[np.float64]
    incidence: NDArray[np.float64]
    albedo: NDArray[np.float64]
    radiance: NDArray[np.float64]
    lost: NDArray[np.bool_]


def _look(world, poses, time_s, strip, faults, rng) -> _View:
    bearings = np.array(strip.bearings_rad)
    step = np.median(np.diff(np.sort(bearings))) if strip.columns > 1 else np.radians(1)
    fan = bearings[:, None] + step * np.array([0.0, -0.25, 0.25])
    angle = poses[:, 2, None, None] + fan
    x, y = (np.broadcast_to(poses[:, i, None, None], angle.shape) for i in (0, 1))
    range_m, cosine, linear, lost_m = _meet_truth(world, x, y, angle, SIGHT * strip.max_range_m, faults, rng)
    _meet_people(world, x, y, angle, time_s, range_m, cosine, linear)
    seen = np.isfinite(range_m)
    reach = np.where(seen, range_m, 0.0)
    ambient = world.light.ambient(x + reach * np.cos(angle), y + reach * np.sin(angle))
    bright = (ambient + lamp(reach, cosine))[..., None] * linear
    radiance = world.light.rgb * np.where(seen[..., None], bright, DAYLIGHT)
    return _View(range_m, np.arccos(np.clip(cosine, 0, 1)), linear, radiance, lost_m < range_m)


def _meet_truth(world, x, y, angle, limit, faults, rng):
    """Range, cosine of incidence, linear colour of what stands there; range of glass that loses the ray."""
    truth = world.truth
    stops = (truth.kind != DOOR) | (truth.state != OPEN)
    glass = truth.kind == WINDOW
    solid = truth.segments[stops & ~glass]
    rays = x.ravel(), y.ravel(), angle.ravel()
    range_m, hit = (a.reshape(angle.shape) for a in cast(build_scene(solid), *rays, limit))
    segment = np.flatnonzero(stops & ~glass)[hit]
    lost_m = np.full(angle.shape, np.inf)
    fate = rng.random(angle.shape[:2])[..., None]  # all rays of a column fare alike
    if glass.any():
        pane_m, pane = (
            a.reshape(angle.shape) for a in cast(build_scene(truth.segments[glass]), *rays, limit)
        )
        reflects = fate >= faults.glass_through + faults.glass_none
        lost_m = np.where((fate >= faults.glass_through) & ~reflects, pane_m, np.inf)
        back = reflects & (pane_m < range_m)
        range_m = np.where(back, pane_m, range_m)
        segment = np.where(back, np.flatnonzero(glass)[pane], segment)
    along = truth.segments[segment, 2:] - truth.segments[segment, :2]
    across = np.abs(np.cos(angle) * along[..., 1] - np.sin(angle) * along[..., 0])
    cosine = across / np.maximum(np.linalg.norm(along, axis=-1), 1e-12)
    palette = srgb_to_linear([finish.srgb for finish in truth.finishes])
    return range_m.astype(np.float64), cosine, palette[truth.finish[segment]], lost_m


def _meet_people(world, x, y, angle, time_s, range_m, cosine, linear) -> None:
    """Put people, as discs, before what stands there; changes the last three arrays."""
    for person, place in enumerate(np.moveaxis(world.people.at(time_s), 1, 0)):
        dx, dy = (place[:, i, None, None] - axis for i, axis in enumerate((x, y)))
        ahead, aside = (
            dx * np.cos(angle) + dy * np.sin(angle),
            dy * np.cos(angle) - dx * np.sin(angle),
        )
        half = np.sqrt(np.maximum(PERSON_RADIUS_M**2 - aside**2, 0))
        near = ahead - half
        met = (half > 0) & (near > 0) & (near < range_m) & (np.hypot(dx, dy) >= PERSONAL_SPACE_M)
        range_m[met], cosine[met] = near[met], half[met] / PERSON_RADIUS_M
        linear[met] = world.people.linear_rgb[person]


def range_sd(range_m: NDArray, incidence_rad: NDArray, faults: Faults) -> NDArray[np.float64]:
    """Spread of a measured range, metres."""
    theta = np.minimum(incidence_rad, STEEPEST_RAD)
    steep = faults.sd_steep / np.sqrt(np.maximum(range_m, 0.1)) * (theta / (np.pi / 2 - theta)) ** 2
    return faults.sd_m + faults.sd_growth_per_m * (range_m - 0.4) ** 2 + steep


def missing_chance(
    range_m: NDArray, incidence_rad: NDArray, linear: NDArray, max_range_m: float, faults: Faults
) -> NDArray[np.float64]:
    """Chance that nothing comes back from a surface in reach, bursts aside."""
    dark = faults.missing_dark * (range_m / max_range_m) ** 2 * (1 - linear @ LUMINANCE)
    steep = np.clip((incidence_rad - STEEP_FROM_RAD) / (np.pi / 2 - STEEP_FROM_RAD), 0, 1)
    return faults.missing + dark + faults.missing_steep * steep**2


def _measure_range(view, world, strip, faults, rng) -> NDArray[np.float64]:
    true = view.range_m[..., 0]
    reach = np.where(np.isfinite(true), true, 0.0)
    side = np.where(rng.random(true.shape) < 0.5, view.range_m[..., 1], view.range_m[..., 2])
    side = np.where(np.isfinite(side), side, reach)
    mixed = (np.abs(side - reach) > EDGE_M) & (rng.random(true.shape) < faults.mixed)
    share = rng.random(true.shape)
    depth = np.where(mixed, reach + share * (side - reach), reach)
    short = rng.random(true.shape) < faults.short
    depth = np.where(short, strip.min_range_m + share * np.maximum(reach - strip.min_range_m, 0), depth)
    depth += range_sd(reach, view.incidence[..., 0], faults) * rng.standard_normal(true.shape)
    depth *= world.conditions.range_scale
    chance = missing_chance(reach, view.incidence[..., 0], view.albedo[..., 0, :], strip.max_range_m, faults)
    gone = rng.random(true.shape) < world.conditions.missing_scale * chance
    gone |= view.lost[..., 0] | ~np.isfinite(true)
    gone |= (depth < strip.min_range_m) | (depth > strip.max_range_m)
    return np.where(gone, np.nan, depth)


def _measure_colour(view, world, faults, rng) -> NDArray[np.float64]:
    """Mean over each column's footprint, noise, clipping, sRGB in 8 bits as cameras give it."""
    linear = view.radiance.mean(axis=2)
    sd = faults.colour_sd + faults.colour_sd_share * linear
    linear = np.clip(linear + sd * rng.standard_normal(linear.shape), 0, 1)
    return np.rint(255 * linear_to_srgb(linear)) / 255


def _bursts(shape, world, faults, rng) -> NDArray[np.bool_]:
    """[t w] columns inside a run of dropped ones."""
    column = np.arange(shape[1])
    start = rng.random(shape) < world.conditions.missing_scale * faults.burst
    end = np.where(start, column + rng.geometric(1 / faults.burst_columns, shape), 0)
    return np.maximum.accumulate(end, axis=1) > column
