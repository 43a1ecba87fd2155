"""What one edge says: the records."""

from dataclasses import dataclass

from sweep.measure.edge.curve import EdgeCurve
from sweep.measure.linear import Floats
from sweep.measure.mtf import Transfer


@dataclass(frozen=True, slots=True)
class EdgeProfile:
    """The edge-spread function as binned samples, for a model to be fitted to.

    `distance_px`: (m,) mean signed distance along the normal, dark to light; `value`: (m,) light, in the unit of
    the samples, light gradient taken out; `u`: (m,) standard uncertainty of each, independent; `gradient`: (m,)
    the column by which a light gradient across the edge would change the values.
    """

    distance_px: Floats
    value: Floats
    u: Floats
    gradient: Floats


@dataclass(frozen=True, slots=True)
class EdgeMeasure:
    """What one edge says. Without `ok`, `why_not` holds codes and the figures are None.

    `dark`, `light`: levels far from the edge, unit of the samples; `angle_deg`: tilt from the nearest axis;
    `spread_px`: 10 to 90 % width; `shift_px`: (n,) of each frame along the normal, each with `shift_u_px`;
    `ragged_px`: rms wander of the print's edge beyond the curve; `bend_px`: how far the curve bows from end to end;
    `frame_level`: (n,) of each frame against the mean level of its samples; `overshoot`: by which the spread function
    leaves its levels near the edge, part of the step, dark and light.
    """

    ok: bool
    why_not: tuple[str, ...] = ()
    transfer: Transfer | None = None
    profile: EdgeProfile | None = None
    dark: float = 0.0
    light: float = 0.0
    angle_deg: float = 0.0
    spread_px: float = 0.0
    shift_px: Floats | None = None
    shift_u_px: float = 0.0
    ragged_px: float = 0.0
    bend_px: float = 0.0
    overshoot: tuple[float, float] = (0.0, 0.0)
    curve: EdgeCurve | None = None
    frame_level: Floats | None = None
