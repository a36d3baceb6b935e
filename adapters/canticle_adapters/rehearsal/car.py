"""The synthetic car: two tracks, four brush tires, on the exact banked surface.

Equations. With ′ for derivatives by station and (T, N′, b) the road's frame (T along the
reference line, N′ left in the surface, b its normal), a point of the surface moves with::

    X_s = A·T + B·b,   A = 1 − n·κ·cosφ,   B = n·φ′,   X_n = N′,   h = |X_s|
    e1 = X_s/h,  e2 = N′,  e3 = e1×e2 = (A·b − B·T)/h      (the true tangent plane)
    X_sn = −κ·cosφ·T + φ′·b
    X_ss = (A_s + B·κ·sinφ)·T + (A·κ·cosφ − B·φ′)·N′ + (B_s − A·κ·sinφ)·b

The turning of (e1, e2, e3) follows from these: about e1 ω1 = ṡ·X_sn·e3, about e2
ω2 = −(ṡ·X_ss + ṅ·X_sn)·e3/h, about e3 ω3 = ṡ·X_ss·e2/h. The velocity has no e3 component, so
with (x, y) the car's axes in the tangent plane, r its yaw rate about e3 and f the specific
forces::

    v̇x = fx + gx + r·vy       v̇y = fy + gy − r·vx       I·ṙ = Mz       χ̇ = r − ω3
    fz = ω1·ṅ − ω2·ṡ·h + g·cosφ·A/h

The normal force so contains every term of the moving surface, and no algebraic loop is left.

Simplifications. The center of gravity moves on the surface itself (its height matters for
load transfer only); roll and pitch inertia are replaced by one first-order lag of the load
transfer; wheels have no inertia: the longitudinal slip that carries the demanded torque is
found by one fixed-point step a millisecond; tires have no relaxation length.

Tire: isotropic brush model with parabolic pressure, F = C·σ·(1 − ψ + ψ²/3), ψ = σ/σ_max
(from memory: H. B. Pacejka, Tire and Vehicle Dynamics, chapter 3).
"""

from __future__ import annotations

from dataclasses import dataclass
from math import atan, cos, radians, sin, sqrt

from canticle_adapters.rehearsal.oval import Oval

GRAVITY_MPS2 = 9.81
STEP_S = 0.001
MOST_SLIP = 0.12
LEAST_GRIP = 0.85


@dataclass(frozen=True, slots=True)
class CarData:
    """The car's numbers; the defaults are those of the public car file (a stock-type car)."""

    name: str = "Pellin 58"
    mass_kg: float = 1540.0
    wheelbase_m: float = 2.79
    front_weight_share: float = 0.51
    left_weight_share: float = 0.50
    cg_height_m: float = 0.45
    track_front_m: float = 1.63
    track_rear_m: float = 1.60
    yaw_inertia_kgm2: float = 2600.0
    roll_stiffness_front_share: float = 0.62
    roll_gradient_deg_per_g: float = 1.0
    downforce_front_n_per_mps2: float = 0.35
    downforce_rear_n_per_mps2: float = 0.45
    drag_n_per_mps2: float = 0.55
    brake_front_share: float = 0.62
    steering_ratio: float = 12.0
    peak_friction: float = 1.30
    reference_load_n: float = 4000.0
    load_sensitivity: float = -0.10
    cornering_stiffness_per_load: float = 18.0
    transfer_lag_s: float = 0.05
    power_w: float = 380_000.0
    drive_n: float = 7000.0
    engine_brake_n: float = 1300.0
    brake_n: float = 22_000.0
    grip_loss_per_j: float = 1.6e-9
    tread_loss_per_j: float = 1.2e-8


class Car:
    """The car's state and its motion in steps of one millisecond.

    A step is `evaluate` (all forces at the present state) and then `advance`; between the two
    everything belongs to the same instant.

    Parameters
    ----------
    oval
        The road.
    data
        The car's numbers.
    """

    def __init__(self, oval: Oval, data: CarData | None = None) -> None:
        self.data = data = data if data is not None else CarData()
        self.length_m = oval.length_m
        self._surface = oval.surface
        self._per_m = 1.0 / oval.step_m
        self.station_m = self.lateral_m = self.heading_rad = 0.0
        self.laps = 0
        self.vx_mps = 66.0
        self.vy_mps = self.yaw_rate_radps = self.body_roll_rad = 0.0
        self.wheel_rad = 0.0
        self._lag_x = self._lag_y = 0.0
        self._set_geometry(data)
        self.load_n = [data.mass_kg * GRAVITY_MPS2 / 4.0] * 4
        self.forward_n = [0.0] * 4
        self.left_n = [0.0] * 4
        self.slip_x = [0.0] * 4
        self.slip_tan = [0.0] * 4
        self.slide_w = [0.0] * 4
        self.energy_j = [0.0] * 4
        self.peak = [data.peak_friction] * 4
        self.evaluate(0.0, 0.0, 0.0)

    def _set_geometry(self, data: CarData) -> None:
        front_m = data.wheelbase_m * (1.0 - data.front_weight_share)
        rear_m = front_m - data.wheelbase_m
        left, right = 1.0 - data.left_weight_share, -data.left_weight_share
        self.wheel_x_m = (front_m, front_m, rear_m, rear_m)
        self.wheel_y_m = (
            left * data.track_front_m,
            right * data.track_front_m,
            left * data.track_rear_m,
            right * data.track_rear_m,
        )
        share = data.roll_stiffness_front_share
        self._pitch_arm = data.cg_height_m / data.wheelbase_m
        self._front_roll_arm = share * data.cg_height_m / data.track_front_m
        self._rear_roll_arm = (1.0 - share) * data.cg_height_m / data.track_rear_m
        self._roll_per_mps2 = radians(data.roll_gradient_deg_per_g) / GRAVITY_MPS2

    def evaluate(self, steer_rad: float, throttle: float, brake: float) -> None:
        """Work out all forces and accelerations for these controls at the present state."""
        self._on_surface()
        self._loads()
        self._tires(steer_rad / self.data.steering_ratio, throttle, brake)
        self._accelerations()

    def _on_surface(self) -> None:
        """Find the tangent plane, its turning, gravity in it and the normal specific force."""
        place = self.station_m * self._per_m
        index = int(place)
        part = place - index
        (k, k1, c, s, f1, f2, dk, dk1, dc, ds, df1, df2) = self._surface[index]
        k += part * dk
        k1 += part * dk1
        c += part * dc
        s += part * ds
        f1 += part * df1
        f2 += part * df2
        n = self.lateral_m
        a = 1.0 - n * k * c
        b = n * f1
        h = sqrt(a * a + b * b)
        cos_x, sin_x = cos(self.heading_rad), sin(self.heading_rad)
        along = self.vx_mps * cos_x - self.vy_mps * sin_x
        across = self.vx_mps * sin_x + self.vy_mps * cos_x
        rate = along / h
        twist = (f1 * a + k * c * b) / h  # X_sn·e3
        bend_t = -n * (k1 * c - k * s * f1) + b * k * s
        bend_b = n * f2 - a * k * s
        lift = (bend_b * a - bend_t * b) / h  # X_ss·e3
        self.turn_1 = rate * twist
        self.turn_2 = -(rate * lift + across * twist) / h
        self.turn_3 = rate * (a * k * c - b * f1) / h
        self.station_rate, self.lateral_rate = rate, across
        gravity_1 = -GRAVITY_MPS2 * c * b / h
        gravity_2 = -GRAVITY_MPS2 * s
        self.gravity_x = gravity_1 * cos_x + gravity_2 * sin_x
        self.gravity_y = gravity_2 * cos_x - gravity_1 * sin_x
        self.force_z_mps2 = self.turn_1 * across - self.turn_2 * along + GRAVITY_MPS2 * c * a / h
        self.surface_at = (a / h, b / h, c, s, cos_x, sin_x, h)

    def _loads(self) -> None:
        data = self.data
        square = self.vx_mps * self.vx_mps
        body = data.mass_kg * self.force_z_mps2
        down_front = data.downforce_front_n_per_mps2 * square
        total = body + down_front + data.downforce_rear_n_per_mps2 * square
        front = data.front_weight_share * body + down_front - self._pitch_arm * self._lag_x
        front = min(max(front, 0.0), total)
        rear = total - front
        share = data.left_weight_share
        left = share * front - self._front_roll_arm * self._lag_y
        left = min(max(left, 0.0), front)
        rear_left = share * rear - self._rear_roll_arm * self._lag_y
        rear_left = min(max(rear_left, 0.0), rear)
        self.normal_n = total
        self.load_n = [left, front - left, rear_left, rear - rear_left]

    def _tires(self, wheel_rad: float, throttle: float, brake: float) -> None:
        data = self.data
        self.wheel_rad = wheel_rad
        cos_w, sin_w = cos(wheel_rad), sin(wheel_rad)
        vx, vy, r = self.vx_mps, self.vy_mps, self.yaw_rate_radps
        drive = min(data.drive_n, data.power_w / vx) * throttle
        drive -= data.engine_brake_n * (1.0 - throttle)
        brake_front = -0.5 * brake * data.brake_n * data.brake_front_share
        brake_rear = 0.5 * (drive - brake * data.brake_n * (1.0 - data.brake_front_share))
        y0, y1, y2, y3 = self.wheel_y_m
        x_front, x_rear = self.wheel_x_m[0], self.wheel_x_m[2]
        across = (vy + r * x_front) * cos_w
        along = (vy + r * x_front) * sin_w
        for wheel, y in ((0, y0), (1, y1)):
            ahead = vx - r * y
            self._tire(wheel, ahead * cos_w + along, across - ahead * sin_w, brake_front)
            fx, fy = self.forward_n[wheel], self.left_n[wheel]
            self.forward_n[wheel] = fx * cos_w - fy * sin_w
            self.left_n[wheel] = fx * sin_w + fy * cos_w
        across = vy + r * x_rear
        self._tire(2, vx - r * y2, across, brake_rear)
        self._tire(3, vx - r * y3, across, brake_rear)

    def _tire(self, wheel: int, along: float, across: float, demand_n: float) -> None:
        """Work out one tire's forces in its own axes; `demand_n` is what its torque asks for."""
        data = self.data
        load = self.load_n[wheel]
        stiffness = data.cornering_stiffness_per_load
        reference = data.reference_load_n
        friction = self.peak[wheel] * (1.0 + data.load_sensitivity * (load - reference) / reference)
        slip_x = self.slip_x[wheel]
        tangent = across / along
        slip_y = tangent * (1.0 - slip_x)
        slip = sqrt(slip_x * slip_x + slip_y * slip_y)
        part = slip * stiffness / (3.0 * friction)
        if part < 1.0:
            secant = stiffness * load * (1.0 - part + part * part / 3.0)
        else:
            secant = friction * load / slip
        self.forward_n[wheel] = secant * slip_x
        self.left_n[wheel] = -secant * slip_y
        self.slip_tan[wheel] = tangent
        self.slide_w[wheel] = secant * slip * slip * along / (1.0 - slip_x)
        wanted = demand_n / secant if secant > 1.0 else 0.0
        self.slip_x[wheel] = min(max(wanted, -MOST_SLIP), MOST_SLIP)

    def _accelerations(self) -> None:
        data = self.data
        x0, x1, x2, x3 = self.forward_n
        y0, y1, y2, y3 = self.left_n
        arm = self.wheel_y_m
        self.tires_x_n = x0 + x1 + x2 + x3
        self.tires_y_n = y0 + y1 + y2 + y3
        drag = data.drag_n_per_mps2 * self.vx_mps * self.vx_mps
        self.force_x_mps2 = (self.tires_x_n - drag) / data.mass_kg
        self.force_y_mps2 = self.tires_y_n / data.mass_kg
        moment = (y0 + y1) * self.wheel_x_m[0] + (y2 + y3) * self.wheel_x_m[2]
        moment -= x0 * arm[0] + x1 * arm[1] + x2 * arm[2] + x3 * arm[3]
        self.yaw_accel_radps2 = moment / data.yaw_inertia_kgm2

    def advance(self) -> None:
        """Move one millisecond on (semi-implicit Euler, the place by the mean velocity)."""
        dt = STEP_S
        vx, vy, r = self.vx_mps, self.vy_mps, self.yaw_rate_radps
        new_vx = vx + dt * (self.force_x_mps2 + self.gravity_x + r * vy)
        new_vy = vy + dt * (self.force_y_mps2 + self.gravity_y - r * vx)
        new_r = r + dt * self.yaw_accel_radps2
        self.vx_mps, self.vy_mps, self.yaw_rate_radps = new_vx, new_vy, new_r
        _, _, _, _, cos_x, sin_x, h = self.surface_at
        mean_vx, mean_vy = 0.5 * (vx + new_vx), 0.5 * (vy + new_vy)
        turn = dt * (0.5 * (r + new_r) - self.turn_3)
        cos_m, sin_m = cos_x - 0.5 * turn * sin_x, sin_x + 0.5 * turn * cos_x
        self.station_m += dt * (mean_vx * cos_m - mean_vy * sin_m) / h
        self.lateral_m += dt * (mean_vx * sin_m + mean_vy * cos_m)
        self.heading_rad += turn
        self._settle(dt)
        if self.station_m >= self.length_m:
            self.station_m -= self.length_m
            self.laps += 1

    def _settle(self, dt: float) -> None:
        """Let the slow things follow: load transfer, body roll, and what sliding wears off."""
        share = dt / self.data.transfer_lag_s
        self._lag_x += share * (self.tires_x_n - self._lag_x)
        self._lag_y += share * (self.tires_y_n - self._lag_y)
        roll = self.body_roll_rad
        felt_y = self.force_y_mps2 + self.force_z_mps2 * roll
        self.body_roll_rad = roll + share * (self._roll_per_mps2 * felt_y - roll)
        energy, slide = self.energy_j, self.slide_w
        energy[0] += dt * slide[0]
        energy[1] += dt * slide[1]
        energy[2] += dt * slide[2]
        energy[3] += dt * slide[3]

    def wear(self) -> None:
        """Let the energy spent so far lower the peak friction; call it now and then."""
        data = self.data
        for wheel, energy in enumerate(self.energy_j):
            grip = max(1.0 - data.grip_loss_per_j * energy, LEAST_GRIP)
            self.peak[wheel] = data.peak_friction * grip

    def slip_angles_rad(self) -> list[float]:
        """Return the ISO 8855 slip angles: positive where the wheel points right of its motion."""
        return [atan(tangent) for tangent in self.slip_tan]
