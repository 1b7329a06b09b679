"""What a rendered clip shows: camera, robot, cards, floor, light, sensor, timing.

Everything is a frozen dataclass with usable defaults, so a test states only what it varies:
``Scene(camera=Camera(tilt_deg=20.0, k1=-0.1), robot=Robot(deck_height_mm=120.0))``.

Frames of reference: the floor is the plane z = 0 in mm, x right, y up as seen from above, z towards the camera.
With no tilt and no roll the picture shows the floor with x to the right and y upwards. Pixel centres are at
integer coordinates, image y points down, the principal point is the picture's centre. Angles are
counter-clockwise positive seen from above. Grey levels are code values of the 8-bit luma plane.
"""

from __future__ import annotations

from dataclasses import dataclass, field

from demo_videos.render.moves import CameraMove, Stabiliser


@dataclass(frozen=True, kw_only=True)
class Camera:
    """A pinhole camera with radial (Brown) distortion, looking down at a point of the floor.

    `tilt_deg` is the angle between the optical axis and the vertical; the camera stands away from the look-at
    point in the floor direction `tilt_azimuth_deg`. `k1` and `k2` act on normalised coordinates as in OpenCV.
    """

    width_px: int = 1920
    height_px: int = 1080
    focal_px: float = 1500.0
    distance_mm: float = 1600.0
    tilt_deg: float = 15.0
    tilt_azimuth_deg: float = -90.0
    roll_deg: float = 0.0
    look_at_mm: tuple[float, float] = (0.0, 0.0)
    k1: float = 0.0
    k2: float = 0.0
    moves: tuple[CameraMove, ...] = ()
    stabiliser: Stabiliser | None = None


@dataclass(frozen=True, kw_only=True)
class Mount:
    """A marker on the robot: where its centre sits in the robot frame (x forward, y left) and how it is turned."""

    marker_id: int
    x_mm: float
    y_mm: float = 0.0
    angle_deg: float = 0.0
    extra_height_mm: float = 0.0
    mirrored: bool = False
    dirt: float = 0.0
    """Share of the marker's area under dirt, 0 to 1."""
    crease_deg: float = 0.0
    """Fold across the middle of the marker; the half beyond the fold leans by this angle."""
    paper: float = 0.85
    ink: float = 0.05


@dataclass(frozen=True, kw_only=True)
class Robot:
    """The cart as the camera sees it. Its frame has the origin midway between the drive wheels, on the floor."""

    dictionary: str = "APRILTAG_36h11"
    marker_side_mm: float = 40.0
    quiet_modules: float = 1.5
    fore: Mount = Mount(marker_id=0, x_mm=48.0)
    aft: Mount = Mount(marker_id=1, x_mm=-84.0)
    deck_height_mm: float = 80.0
    deck_length_mm: float = 232.0
    deck_width_mm: float = 112.0
    deck_centre_mm: float = -18.0
    """Centre of the deck along the fore-aft axis."""
    wheel_diameter_mm: float = 64.0
    inner_track_mm: float = 118.0
    tyre_width_mm: float = 20.0
    visible: bool = True


@dataclass(frozen=True, kw_only=True)
class CardShift:
    """A floor card pushed to another place at a given time."""

    time_s: float
    x_mm: float = 0.0
    y_mm: float = 0.0
    angle_deg: float = 0.0


@dataclass(frozen=True, kw_only=True)
class Card:
    """A marker card lying on the floor; `curl_mm` is how far its two side edges stand up."""

    card_id: int
    x_mm: float
    y_mm: float
    angle_deg: float = 0.0
    side_mm: float = 60.0
    dictionary: str | None = None
    """The robot's dictionary when None."""
    quiet_modules: float = 1.5
    curl_mm: float = 0.0
    shifts: tuple[CardShift, ...] = ()
    mirrored: bool = False
    dirt: float = 0.0
    paper: float = 0.85
    ink: float = 0.05


@dataclass(frozen=True, kw_only=True)
class Floor:
    """The surface: ``cork``, ``lino``, ``rubber``, ``wood``, ``plain`` or ``chequer``."""

    kind: str = "cork"
    seed: int = 1
    contrast: float = 1.0
    angle_deg: float = 0.0


@dataclass(frozen=True, kw_only=True)
class ShadowEdge:
    """A straight shadow edge in the picture; light is lost on the side that `direction_deg` points to.

    The edge passes through `at_px`; `width_px` makes it a band; `speed_px_s` moves it along its direction,
    and it then acts only between `start_s` and `end_s`.
    """

    at_px: tuple[float, float]
    direction_deg: float = 0.0
    darkness: float = 0.4
    penumbra_px: float = 8.0
    width_px: float | None = None
    speed_px_s: float = 0.0
    start_s: float = float("-inf")
    end_s: float = float("inf")


@dataclass(frozen=True, kw_only=True)
class Glint:
    """A reflection that stays where it is in the picture and shows on whatever is glossy there."""

    at_px: tuple[float, float]
    radius_px: float = 12.0
    strength: float = 0.8
    floor_gloss: float = 0.15
    start_s: float = float("-inf")
    end_s: float = float("inf")


@dataclass(frozen=True, kw_only=True)
class ExposureStep:
    """The exposure changes by `factor` at `time_s`, over `ramp_s`."""

    time_s: float
    factor: float
    ramp_s: float = 0.2


@dataclass(frozen=True, kw_only=True)
class Light:
    """Illumination. `gradient` and `vignette` are the relative loss from one side, or from centre to corner."""

    level: float = 1.0
    gradient: float = 0.15
    gradient_direction_deg: float = 30.0
    vignette: float = 0.15
    shadows: tuple[ShadowEdge, ...] = ()
    glints: tuple[Glint, ...] = ()
    exposure_steps: tuple[ExposureStep, ...] = ()
    flicker: float = 0.0
    flicker_hz: float = 100.0


@dataclass(frozen=True, kw_only=True)
class Sensor:
    """From linear light to code values: blur, noise, tone curve, sharpening, quantising, in this order.

    `noise_grey` is the standard deviation in 8-bit code values under a linear tone curve; `shot_share` is the
    part of its variance at half light that grows with the light. `line_delay_s` is the rolling shutter's time
    from one row to the next. A frame's time stamp is the middle of the exposure of the picture's middle row.
    """

    psf_px: float = 0.8
    exposure_s: float = 0.008
    line_delay_s: float = 0.0
    noise_grey: float = 2.5
    shot_share: float = 0.0
    gamma: float = 1.0
    s_curve: float = 0.0
    sharpen: float = 0.0
    sharpen_radius_px: float = 1.2
    bits: int = 8
    full_range: bool = False
    focus_px: tuple[tuple[float, float], ...] = ()
    """Extra blur (time in s, standard deviation in px), linear in between: an autofocus hunting."""


@dataclass(frozen=True, kw_only=True)
class Occluder:
    """A polygon in the picture that travels along way points and hides what it passes over.

    `outline_px` is relative to the way point; `path` holds (time in s, x, y).
    """

    outline_px: tuple[tuple[float, float], ...]
    path: tuple[tuple[float, float, float], ...]
    shade: float = 0.35
    softness_px: float = 2.0


@dataclass(frozen=True, kw_only=True)
class Timing:
    """Frame times: a nominal rate, optionally varying, with dropped or doubled stamps."""

    fps: float = 30.0
    duration_s: float | None = None
    """How long is filmed; to the end of the motion when None."""
    begin_s: float = 0.0
    """Time of the motion at which filming begins."""
    first_s: float = 0.0
    """Presentation time of the first frame in the container."""
    jitter: float = 0.0
    """Standard deviation of a frame interval, relative to the nominal one."""
    dropped_share: float = 0.0
    repeated_share: float = 0.0
    """Share of frames whose time stamp is wrong: that of the frame before (Matroska only)."""
    slow_spans: tuple[tuple[float, float, float], ...] = ()
    """(start, end, fps): stretches in which the camera lowers its rate."""


@dataclass(frozen=True, kw_only=True)
class Scene:
    """One rendered clip, all but the robot's motion."""

    camera: Camera = Camera()
    robot: Robot = Robot()
    cards: tuple[Card, ...] = ()
    floor: Floor = Floor()
    light: Light = Light()
    sensor: Sensor = Sensor()
    timing: Timing = Timing()
    occluders: tuple[Occluder, ...] = ()
    seed: int = 0
    """Sensor noise, dirt and time jitter."""
    tint: bool = field(default=False)
    """Colour the chroma planes of encoded clips after the floor; luma is not touched."""
