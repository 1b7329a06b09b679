"""How the cart really moves: wheels with slip, backlash, drag and grain, integrated in small steps.

The heading does not come from a formula for whole turns. Each millisecond both wheels roll on contact lines
that wander across the tyres, dragged rear wheels make them creep (creepage proportional to the tangential
force, as in Kalker's linear theory), the surface's grain changes that force twice a revolution, and the gears
take up their slack when a wheel reverses.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import ArrayLike, NDArray

from demo_videos.render.moves import smooth_step

FloatArray = NDArray[np.float64]

STEP_S = 0.001


@dataclass(frozen=True, kw_only=True)
class Drive:
    """Chassis, floor contact and controller of a cart.

    Scatter values are standard deviations. Contact fractions run from 0 at the tyre's inner edge to 1.
    """

    wheel_diameter_mm: float = 64.0
    inner_track_mm: float = 118.0
    tyre_width_mm: float = 20.0
    contact_fraction: float = 0.35
    contact_difference: float = 0.06
    """Left less right contact fraction: the spin centre sits off the middle."""
    contact_scatter: float = 0.010
    contact_wander: float = 0.010
    """Slowly wandering part, with a memory of about eight turns."""
    backlash_wheel_deg: float = 0.0
    backlash_scatter: float = 0.06
    """Relative."""
    drag_creep: float = 0.01
    """Relative loss of rolling through the dragged rear wheels."""
    drag_scatter: float = 0.1
    """Relative, along the path."""
    drag_arm_mm: float = 95.0
    grain: float = 0.0
    """Relative change of the yaw per wheel angle, two cycles a revolution."""
    grain_axis_deg: float = 25.0
    sideways_bias: float = 0.0
    """Relative: counter-clockwise turns gain this, clockwise turns lose it."""
    rate_wheel_deg_s: float = 160.0
    acceleration_wheel_deg_s2: float = 600.0
    overshoot_wheel_deg: float = 0.0
    settle_s: float = 0.06
    rock_deg: float = 0.0
    """Pitching of the body at starts and stops."""
    creep_deg: float = 0.0
    """Heading gained slowly after the stop, on the turn's side."""
    creep_s: float = 0.5


@dataclass(frozen=True, kw_only=True)
class Spin:
    """A commanded spin turn; positive wheel degrees turn counter-clockwise."""

    wheel_deg: float
    rest_s: float | None = None
    rate_wheel_deg_s: float | None = None


@dataclass(frozen=True, kw_only=True)
class Missed:
    """A commanded turn that does not happen."""

    wheel_deg: float
    rest_s: float | None = None


@dataclass(frozen=True, kw_only=True)
class TwoPushes:
    """A commanded turn made in two parts with a short stop between."""

    wheel_deg: float
    share: float = 0.55
    pause_s: float = 0.25
    rest_s: float | None = None


@dataclass(frozen=True, kw_only=True)
class Push:
    """Somebody turns the cart by hand without a command."""

    heading_deg: float
    duration_s: float = 0.6
    rest_s: float | None = None


@dataclass(frozen=True, kw_only=True)
class Straight:
    """The cart drives straight ahead (backwards when negative)."""

    distance_mm: float
    rest_s: float | None = None


@dataclass(frozen=True, kw_only=True)
class Lift:
    """A hand lifts the cart, carries it and puts it back elsewhere."""

    dx_mm: float = 0.0
    dy_mm: float = 0.0
    heading_deg: float = 0.0
    height_mm: float = 90.0
    tilt_deg: float = 8.0
    duration_s: float = 2.0
    rest_s: float | None = None


@dataclass(frozen=True, kw_only=True)
class Wait:
    """Nothing happens."""

    duration_s: float


Action = Spin | Missed | TwoPushes | Push | Straight | Lift | Wait


@dataclass(frozen=True, kw_only=True)
class TurnTruth:
    """One turn as it happened. Headings are means over the rests before and after."""

    turn: int
    commanded_wheel_deg: float | None
    start_s: float
    end_s: float
    start_heading_deg: float
    end_heading_deg: float

    @property
    def heading_change_deg(self) -> float:
        """Heading after less heading before."""
        return self.end_heading_deg - self.start_heading_deg


@dataclass(frozen=True, kw_only=True)
class EventTruth:
    """Something that happened besides the commanded turns."""

    start_s: float
    end_s: float
    kind: str
    detail: str = ""


@dataclass(frozen=True, eq=False)
class Poses:
    """The body at M instants."""

    x_mm: FloatArray
    y_mm: FloatArray
    heading_rad: FloatArray
    lift_mm: FloatArray
    pitch_rad: FloatArray
    roll_rad: FloatArray
    wheel_deg: FloatArray
    """Left and right wheel, shape (2, M)."""

    def still(self) -> bool:
        """Whether all the instants show the same pose."""
        parts = (self.x_mm, self.y_mm, self.heading_rad, self.lift_mm, self.pitch_rad, self.roll_rad)
        return all(float(np.ptp(part)) < 1e-9 for part in parts)


@dataclass(frozen=True, eq=False, kw_only=True)
class Motion:
    """The cart's path on a grid of one millisecond, with what was commanded and what came of it."""

    time_s: FloatArray
    state: FloatArray
    """Shape (8, N): x, y (mm), heading (rad, unwrapped), lift (mm), pitch, roll (rad), wheels left, right (deg)."""
    turns: tuple[TurnTruth, ...]
    commands: tuple[float, ...]
    """Wheel degrees in the order commanded, missed ones included."""
    events: tuple[EventTruth, ...] = ()

    @property
    def duration_s(self) -> float:
        """End of the last rest."""
        return float(self.time_s[-1])

    def at(self, time_s: ArrayLike) -> Poses:
        """Return the body's pose at M times; before the start and after the end it stands still."""
        times = np.atleast_1d(np.asarray(time_s, dtype=float))
        x, y, heading, lift, pitch, roll, left, right = (np.interp(times, self.time_s, row) for row in self.state)
        return Poses(x, y, heading, lift, pitch, roll, np.stack([left, right]))

    def heading_deg(self, time_s: ArrayLike) -> FloatArray:
        """Return the heading at M times."""
        return np.rad2deg(self.at(time_s).heading_rad)


@dataclass(eq=False)
class Body:
    """The cart's state while a script is played."""

    drive: Drive
    rng: np.random.Generator
    x_mm: float
    y_mm: float
    heading_rad: float
    chunks: list[FloatArray] = field(default_factory=list)
    n_steps: int = 0
    wheel_deg: list[float] = field(default_factory=lambda: [0.0, 0.0])
    slack_deg: list[float] = field(default_factory=lambda: [0.0, 0.0])
    """Room left to the wheel's lower play limit, for each wheel."""
    wander: NDArray[np.float64] = field(default_factory=lambda: np.zeros(2))
    drag_noise: float = 0.0

    @property
    def now_s(self) -> float:
        """The time reached."""
        return self.n_steps * STEP_S

    def append(self, chunk: FloatArray) -> None:
        """Add states (8, n) to the path."""
        self.chunks.append(chunk)
        self.n_steps += chunk.shape[1]

    def state(self) -> FloatArray:
        """Return the standing state as a column (8, 1)."""
        return np.array([[self.x_mm, self.y_mm, self.heading_rad, 0, 0, 0, *self.wheel_deg]]).T

    def rest(self, duration_s: float) -> None:
        """Stand still."""
        steps = round(duration_s / STEP_S)
        if steps > 0:
            self.append(np.repeat(self.state(), steps, axis=1))


def spin_motion(
    wheel_deg: Sequence[float],
    *,
    drive: Drive | None = None,
    seed: int = 0,
    rest_s: float = 1.0,
    start_delay_s: float = 1.0,
    start: tuple[float, float, float] = (0.0, 0.0, 0.0),
) -> Motion:
    """Return the motion of a list of spin turns; `start` is x (mm), y (mm) and heading (deg)."""
    return play(
        [Spin(wheel_deg=value) for value in wheel_deg],
        drive=drive,
        seed=seed,
        rest_s=rest_s,
        start_delay_s=start_delay_s,
        start=start,
    )


def play(
    actions: Sequence[Action],
    *,
    drive: Drive | None = None,
    seed: int = 0,
    rest_s: float = 1.0,
    start_delay_s: float = 1.0,
    start: tuple[float, float, float] = (0.0, 0.0, 0.0),
) -> Motion:
    """Return the motion of a script of actions, with `rest_s` of standing still after each."""
    drive = drive or Drive()
    rng = np.random.default_rng([seed, 77])
    body = Body(drive, rng, start[0], start[1], float(np.deg2rad(start[2])))
    body.wander = rng.normal(0.0, drive.contact_wander, 2)
    gap = drive.backlash_wheel_deg
    body.slack_deg = [float(value) for value in rng.uniform(0.0, gap, 2)] if gap else [0.0, 0.0]
    body.rest(start_delay_s)
    spans: list[tuple[float | None, float, float]] = []
    events: list[EventTruth] = []
    commands: list[float] = []
    for action in actions:
        begin_s = body.now_s
        act(body, action)
        end_s = body.now_s
        note(action, begin_s, end_s, spans, events, commands)
        own_rest_s = getattr(action, "rest_s", None)
        if not isinstance(action, Wait):
            body.rest(rest_s if own_rest_s is None else own_rest_s)
    body.append(body.state())
    states = np.concatenate(body.chunks, axis=1)
    times = np.arange(states.shape[1]) * STEP_S
    busy = [(start_s, end_s) for _, start_s, end_s in spans] + [(e.start_s, e.end_s) for e in events]
    return Motion(
        time_s=times,
        state=states,
        turns=turn_truths(times, states[2], spans, busy),
        commands=tuple(commands),
        events=tuple(events),
    )


def act(body: Body, action: Action) -> None:
    """Carry out one action."""
    match action:
        case Spin():
            spin(body, action.wheel_deg, action.rate_wheel_deg_s)
        case TwoPushes():
            spin(body, action.wheel_deg * action.share, None)
            body.rest(action.pause_s)
            spin(body, action.wheel_deg * (1.0 - action.share), None)
        case Push():
            carry(body, 0.0, 0.0, action.heading_deg, 0.0, 0.0, action.duration_s)
        case Lift():
            carry(
                body,
                action.dx_mm,
                action.dy_mm,
                action.heading_deg,
                action.height_mm,
                action.tilt_deg,
                action.duration_s,
            )
        case Straight():
            straight(body, action.distance_mm)
        case Wait():
            body.rest(action.duration_s)
        case Missed():
            pass


def note(
    action: Action,
    begin_s: float,
    end_s: float,
    spans: list[tuple[float | None, float, float]],
    events: list[EventTruth],
    commands: list[float],
) -> None:
    """Record what an action was: a turn, an event, a command."""
    match action:
        case Spin() | TwoPushes():
            spans.append((action.wheel_deg, begin_s, end_s))
            commands.append(action.wheel_deg)
            if isinstance(action, TwoPushes):
                events.append(EventTruth(start_s=begin_s, end_s=end_s, kind="two pushes"))
        case Missed():
            commands.append(action.wheel_deg)
            events.append(EventTruth(start_s=begin_s, end_s=end_s, kind="missing turn"))
        case Push():
            spans.append((None, begin_s, end_s))
            events.append(EventTruth(start_s=begin_s, end_s=end_s, kind="uncommanded turn"))
        case Lift():
            events.append(EventTruth(start_s=begin_s, end_s=end_s, kind="handled"))
        case Straight():
            events.append(EventTruth(start_s=begin_s, end_s=end_s, kind="driven"))
        case Wait():
            pass


def turn_truths(
    times: FloatArray,
    heading_rad: FloatArray,
    spans: Sequence[tuple[float | None, float, float]],
    busy: Sequence[tuple[float, float]],
) -> tuple[TurnTruth, ...]:
    """Return the turns with their headings averaged over the rests beside them."""
    out = []
    for number, (wheel_deg, start_s, end_s) in enumerate(spans, start=1):
        before = max([end for _, end in busy if end <= start_s + 1e-9], default=0.0)
        after = min([begin for begin, _ in busy if begin >= end_s - 1e-9], default=float(times[-1]))
        out.append(
            TurnTruth(
                turn=number,
                commanded_wheel_deg=wheel_deg,
                start_s=start_s,
                end_s=end_s,
                start_heading_deg=mean_deg(times, heading_rad, before, start_s),
                end_heading_deg=mean_deg(times, heading_rad, end_s, after),
            )
        )
    return tuple(out)


def mean_deg(times: FloatArray, heading_rad: FloatArray, start_s: float, end_s: float) -> float:
    """Return the mean heading between two times, in degrees."""
    first = round(start_s / STEP_S)
    last = max(first + 1, round(end_s / STEP_S))
    return float(np.rad2deg(np.mean(heading_rad[first : min(last, len(times))])))


def trapezoid(total_deg: float, rate_deg_s: float, acceleration_deg_s2: float) -> FloatArray:
    """Return the wheel angle at each step of a move with limited rate and acceleration."""
    size = abs(total_deg)
    ramp_s = min(rate_deg_s / acceleration_deg_s2, np.sqrt(size / acceleration_deg_s2))
    top_deg_s = acceleration_deg_s2 * ramp_s
    cruise_s = (size - top_deg_s * ramp_s) / top_deg_s if top_deg_s > 0 else 0.0
    end_s = 2.0 * ramp_s + cruise_s
    t = np.append(np.arange(STEP_S, end_s, STEP_S), end_s)
    up = 0.5 * acceleration_deg_s2 * np.minimum(t, ramp_s) ** 2
    middle = top_deg_s * np.clip(t - ramp_s, 0.0, cruise_s)
    late = np.clip(t - ramp_s - cruise_s, 0.0, ramp_s)
    down = top_deg_s * late - 0.5 * acceleration_deg_s2 * late**2
    return np.asarray(np.sign(total_deg) * (up + middle + down), dtype=float)


def with_overshoot(profile_deg: FloatArray, drive: Drive) -> FloatArray:
    """Add a bump after the stop: the controller runs over and comes back."""
    if drive.overshoot_wheel_deg == 0.0 or len(profile_deg) == 0:
        return profile_deg
    t = np.arange(STEP_S, 6.0 * drive.settle_s, STEP_S) / drive.settle_s
    bump = drive.overshoot_wheel_deg * (t * np.exp(1.0 - t)) ** 2
    end = profile_deg[-1]
    settled = end + np.sign(end) * bump
    settled[-1] = end
    return np.concatenate([profile_deg, settled])


def through_backlash(body: Body, wheel: int, motor_deg: FloatArray) -> FloatArray:
    """Return how far a wheel follows its motor: the play operator, with the slack kept for the next move."""
    gap = body.drive.backlash_wheel_deg
    if gap == 0.0:
        return motor_deg
    gap *= float(np.exp(body.rng.normal(0.0, body.drive.backlash_scatter)))
    low = min(max(body.slack_deg[wheel], 0.0), gap)  # the motor may go back by this much before the wheel does
    wheel_deg = 0.0
    out = np.empty_like(motor_deg)
    for i, motor in enumerate(motor_deg):
        play_deg = motor - wheel_deg + low
        if play_deg > gap:
            wheel_deg += play_deg - gap
        elif play_deg < 0.0:
            wheel_deg += play_deg
        out[i] = wheel_deg
    body.slack_deg[wheel] = float(motor_deg[-1] - wheel_deg + low)
    return out


def spin(body: Body, wheel_deg: float, rate_deg_s: float | None) -> None:
    """Turn on the spot."""
    drive, rng = body.drive, body.rng
    motor = trapezoid(wheel_deg, rate_deg_s or drive.rate_wheel_deg_s, drive.acceleration_wheel_deg_s2)
    motor = with_overshoot(motor, drive)
    left = through_backlash(body, 0, -motor)
    right = through_backlash(body, 1, motor)
    body.wander = 0.88 * body.wander + rng.normal(0.0, drive.contact_wander * np.sqrt(1 - 0.88**2), 2)
    fraction = drive.contact_fraction + body.wander + rng.normal(0.0, drive.contact_scatter, 2)
    fraction += 0.5 * drive.contact_difference * np.array([1.0, -1.0])
    lines_mm = 0.5 * drive.inner_track_mm + drive.tyre_width_mm * np.clip(fraction, 0.0, 1.0)
    path = roll(body, np.diff(left, prepend=0.0), np.diff(right, prepend=0.0), lines_mm)
    wheels = np.stack([body.wheel_deg[0] + left, body.wheel_deg[1] + right])
    creep = np.sign(wheel_deg) * np.deg2rad(drive.creep_deg)
    pitch = rocking(motor, drive)
    zero = np.zeros(len(motor))
    body.append(np.stack([path[0], path[1], path[2], zero, pitch, zero, wheels[0], wheels[1]]))
    body.x_mm, body.y_mm, body.heading_rad = (float(row[-1]) for row in path)
    body.wheel_deg = [float(wheels[0, -1]), float(wheels[1, -1])]
    if creep:
        creep_after(body, creep)


def roll(body: Body, left_deg: FloatArray, right_deg: FloatArray, lines_mm: FloatArray) -> FloatArray:
    """Integrate x, y and heading (3, n) over the wheels' steps, both contact lines given."""
    drive, rng = body.drive, body.rng
    radius_mm = 0.5 * drive.wheel_diameter_mm
    track_mm = float(lines_mm.sum())
    noise = rng.standard_normal(len(left_deg))
    keep = 0.995
    axis = np.deg2rad(drive.grain_axis_deg)
    x, y, heading = body.x_mm, body.y_mm, body.heading_rad
    drag = body.drag_noise
    out = np.empty((3, len(left_deg)))
    for i, (step_left, step_right) in enumerate(zip(np.deg2rad(left_deg), np.deg2rad(right_deg), strict=True)):
        if step_left == 0.0 and step_right == 0.0:
            out[:, i] = x, y, heading
            continue
        drag = keep * drag + np.sqrt(1.0 - keep**2) * noise[i]
        creep = drive.drag_creep * (1.0 + drive.drag_scatter * drag)
        side = drive.sideways_bias * np.sign(step_right - step_left)
        grip = (1.0 - creep) * (1.0 + side) * (1.0 + drive.grain * np.cos(2.0 * (heading - axis)))
        go_left, go_right = radius_mm * step_left * grip, radius_mm * step_right * grip
        turn = (go_right - go_left) / track_mm
        ahead = (go_left * lines_mm[1] + go_right * lines_mm[0]) / track_mm
        sideways = creep * turn * track_mm**2 / (4.0 * drive.drag_arm_mm)
        middle = heading + 0.5 * turn
        cos, sin = np.cos(middle), np.sin(middle)
        x += ahead * cos - sideways * sin
        y += ahead * sin + sideways * cos
        heading += turn
        out[:, i] = x, y, heading
    body.drag_noise = drag
    return out


def rocking(motor_deg: FloatArray, drive: Drive) -> FloatArray:
    """Return the body's pitch (rad): a damped answer to the wheels' acceleration, back at rest at the end."""
    if drive.rock_deg == 0.0:
        return np.zeros(len(motor_deg))
    push = np.gradient(np.gradient(motor_deg)) / STEP_S**2 / drive.acceleration_wheel_deg_s2
    out = np.zeros(len(motor_deg))
    angle, speed, omega = 0.0, 0.0, 2.0 * np.pi * 6.0
    for i, value in enumerate(push):
        speed += STEP_S * (omega**2 * (value - angle) - 0.5 * omega * speed)
        angle += STEP_S * speed
        out[i] = angle
    fade = np.minimum(1.0, np.arange(len(out))[::-1] * STEP_S / 0.1)
    return np.asarray(np.deg2rad(drive.rock_deg) * out * fade, dtype=float)


def creep_after(body: Body, creep_rad: float) -> None:
    """Let the heading go on slowly after a stop, as a stressed tyre or cable does."""
    t = np.arange(STEP_S, 5.0 * body.drive.creep_s, STEP_S)
    share = (1.0 - np.exp(-t / body.drive.creep_s)) / (1.0 - np.exp(-5.0))
    chunk = np.repeat(body.state(), len(t), axis=1)
    chunk[2] += creep_rad * share
    body.append(chunk)
    body.heading_rad = float(chunk[2, -1])


def straight(body: Body, distance_mm: float) -> None:
    """Drive ahead with a small random curve."""
    drive = body.drive
    per_deg_mm = np.pi * drive.wheel_diameter_mm / 360.0
    wheel = trapezoid(distance_mm / per_deg_mm, drive.rate_wheel_deg_s, drive.acceleration_wheel_deg_s2)
    curve = body.rng.normal(0.0, np.deg2rad(0.5) / 100.0)
    way = wheel * per_deg_mm
    heading = body.heading_rad + curve * np.abs(way)
    step = np.diff(way, prepend=0.0)
    chunk = np.repeat(body.state(), len(way), axis=1)
    chunk[0] += np.cumsum(step * np.cos(heading))
    chunk[1] += np.cumsum(step * np.sin(heading))
    chunk[2] = heading
    chunk[6] += wheel
    chunk[7] += wheel
    body.append(chunk)
    body.x_mm, body.y_mm, body.heading_rad = (float(chunk[k, -1]) for k in range(3))
    body.wheel_deg = [float(chunk[6, -1]), float(chunk[7, -1])]


def carry(
    body: Body, dx_mm: float, dy_mm: float, turn_deg: float, height_mm: float, tilt_deg: float, duration_s: float
) -> None:
    """Move the cart by hand: up, over, down; flat on the floor when `height_mm` is 0."""
    share = np.arange(1, round(duration_s / STEP_S) + 1) * STEP_S / duration_s
    over = smooth_step((share - 0.2) / 0.6) if height_mm else smooth_step(share)
    up = smooth_step(share / 0.3) * smooth_step((1.0 - share) / 0.3) if height_mm else np.zeros(len(share))
    chunk = np.repeat(body.state(), len(share), axis=1)
    chunk[0] += dx_mm * over
    chunk[1] += dy_mm * over
    chunk[2] += np.deg2rad(turn_deg) * over
    chunk[3] = height_mm * up
    chunk[4] = np.deg2rad(tilt_deg) * up * np.sin(5.0 * share)
    chunk[5] = np.deg2rad(tilt_deg) * up * np.cos(4.0 * share)
    body.append(chunk)
    body.x_mm, body.y_mm, body.heading_rad = (float(chunk[k, -1]) for k in range(3))
