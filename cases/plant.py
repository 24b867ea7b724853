"""The imaginary plant of the demo records: five mechanisms of a kelp washing and drying line.

A plant knows nothing of its controller, so `simulation.py` can run it again with other gains.

Only sums, products, quotients and square roots are used: these give the same bits on every machine,
so the records come out byte for byte the same.
"""
# ruff: noqa: D102 - what the methods do is said once, in `Plant`

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Protocol

State = tuple[float, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class Acting:
    """What acts on a plant during one scan: the final element's input, what a pipe delivers, chance."""

    output: float  # controller output, %
    arriving: float  # what left upstream one dead time ago
    chance: float  # unit normal deviate, held over the scan


class Plant(Protocol):
    """A mechanism as ordinary differential equations with at most one transport delay."""

    @property
    def dead_time_s(self) -> float:
        """Transport delay, s."""

    def rest(self, level: float) -> tuple[State, float]:
        """Return the state at rest with the measured quantity at `level`, and the output (%) holding it."""

    def slope(self, state: State, acting: Acting) -> State:
        """Return the time derivative of the state, per second."""

    def leaving(self, state: State) -> float:
        """Return what enters the pipe."""

    def reading(self, state: State) -> float:
        """Return what the sensor sees."""


class _NoPipe:
    dead_time_s = 0.0

    def leaving(self, state: State) -> float:
        return state[0]


@dataclass(frozen=True, kw_only=True)
class Belt(_NoPipe):
    """Conveyor belt; state: travel (mm), speed (mm/s), pull of the drive (N); read: travel."""

    moving_mass_kg: float = 30.0
    viscous_n_s_per_m: float = 60.0
    dry_friction_n: float = 40.0  # constant while the belt moves forward, as it does throughout
    pull_n_per_percent: float = 4.0
    torque_lag_s: float = 0.004  # the drive's current loop
    lumps_n: float = 3.0  # uneven load of wet kelp

    def rest(self, level: float) -> tuple[State, float]:
        pull = self.viscous_n_s_per_m * level / 1000 + self.dry_friction_n
        return (0.0, level, pull), pull / self.pull_n_per_percent

    def slope(self, state: State, acting: Acting) -> State:
        _, speed, pull = state
        resisting = self.viscous_n_s_per_m * speed / 1000 + self.dry_friction_n + self.lumps_n * acting.chance
        return (
            speed,
            1000 * (pull - resisting) / self.moving_mass_kg,
            (self.pull_n_per_percent * acting.output - pull) / self.torque_lag_s,
        )

    def reading(self, state: State) -> float:
        return state[0]


@dataclass(frozen=True, kw_only=True)
class RinseHeater:
    """Through-flow water heater; state: element, vessel and probe temperatures (°C); read: probe.

    The probe sits a pipe's length behind the vessel: element, vessel and probe store heat.
    The open vessel also loses heat by evaporation, faster than in proportion to its temperature.
    """

    dead_time_s: float = 12.0
    power_w_per_percent: float = 180.0
    element_j_per_k: float = 6000.0
    element_w_per_k: float = 250.0
    vessel_j_per_k: float = 37700.0  # 9 kg of water
    flow_w_per_k: float = 335.0  # 0.08 kg/s of water
    feed_c: float = 12.0
    feed_wander_k: float = 2.0
    room_c: float = 18.0
    evaporation_w_per_k2: float = 1.5
    probe_lag_s: float = 8.0

    def _evaporating(self, vessel: float) -> float:
        above = max(vessel - self.room_c, 0.0)
        return self.evaporation_w_per_k2 * above * above

    def rest(self, level: float) -> tuple[State, float]:
        power = self.flow_w_per_k * (level - self.feed_c) + self._evaporating(level)
        return (level + power / self.element_w_per_k, level, level), power / self.power_w_per_percent

    def slope(self, state: State, acting: Acting) -> State:
        element, vessel, probe = state
        heating = self.element_w_per_k * (element - vessel)
        feed = self.feed_c + self.feed_wander_k * acting.chance
        return (
            (self.power_w_per_percent * acting.output - heating) / self.element_j_per_k,
            (heating - self.flow_w_per_k * (vessel - feed) - self._evaporating(vessel)) / self.vessel_j_per_k,
            (acting.arriving - probe) / self.probe_lag_s,
        )

    def leaving(self, state: State) -> float:
        return state[1]

    def reading(self, state: State) -> float:
        return state[2]


@dataclass(frozen=True, kw_only=True)
class WashTank(_NoPipe):
    """Wash tank; state: mean level (mm), inlet valve opening (%), ripple (mm), ripple speed (mm/s).

    A pump of steady head feeds through the valve against the level; the drain runs by the square root of the
    level (Torricelli). The falling feed stirs the surface: a sloshing mode driven by chance.
    Read: level with ripple.
    """

    area_m2: float = 0.12
    drain_l_per_s_at_1_m: float = 0.65
    feed_l_per_s_per_percent: float = 0.011  # at zero level
    pump_head_mm: float = 2500.0
    valve_lag_s: float = 1.5
    slosh_rad_per_s: float = 7.0
    slosh_damping: float = 0.08
    stirring_mm_per_s2: float = 25.0

    def _feeding(self, level: float) -> float:
        """Return litres per second for each % of opening."""
        return self.feed_l_per_s_per_percent * math.sqrt(1 - level / self.pump_head_mm)

    def _draining(self, level: float) -> float:
        return self.drain_l_per_s_at_1_m * math.sqrt(level / 1000)

    def rest(self, level: float) -> tuple[State, float]:
        opening = self._draining(level) / self._feeding(level)
        return (level, opening, 0.0, 0.0), opening

    def slope(self, state: State, acting: Acting) -> State:
        level, opening, ripple, ripple_speed = state
        slosh = self.slosh_rad_per_s
        return (
            (opening * self._feeding(level) - self._draining(level)) / self.area_m2,  # 1 l/m² is 1 mm
            (acting.output - opening) / self.valve_lag_s,
            ripple_speed,
            self.stirring_mm_per_s2 * acting.chance
            - 2 * self.slosh_damping * slosh * ripple_speed
            - slosh * slosh * ripple,
        )

    def reading(self, state: State) -> float:
        return state[0] + state[2]


@dataclass(frozen=True, kw_only=True)
class SprayHeader(_NoPipe):
    """Spray header; state: pump speed (%), flow (l/s), pressure (bar), transmitter (bar); read: the last.

    Pump head rises with the square of speed and falls with the square of flow; the water in the main has
    inertia; an air cushion stores water by Boyle's law; the nozzles pass the square root of the pressure.
    """

    shut_off_bar: float = 8.0  # at full speed
    resistance_bar_s2_per_l2: float = 1.0
    inertia_bar_s2_per_l: float = 0.2
    cushion_bar_l: float = 9.6  # absolute pressure times air volume
    nozzles_l_per_s: float = 0.69  # at 1 bar
    speed_lag_s: float = 0.25
    transmitter_lag_s: float = 0.15
    clogging: float = 0.006  # nozzles blocked and freed by bits of weed

    def rest(self, level: float) -> tuple[State, float]:
        flow = self.nozzles_l_per_s * math.sqrt(level)
        head = level + self.resistance_bar_s2_per_l2 * flow * flow
        speed = 100 * math.sqrt(head / self.shut_off_bar)
        return (speed, flow, level, level), speed

    def slope(self, state: State, acting: Acting) -> State:
        speed, flow, pressure, shown = state
        head = self.shut_off_bar * speed * speed / 10000 - self.resistance_bar_s2_per_l2 * flow * abs(flow)
        spraying = self.nozzles_l_per_s * (1 + self.clogging * acting.chance) * math.sqrt(max(pressure, 0.0))
        absolute = pressure + 1.013
        return (
            (acting.output - speed) / self.speed_lag_s,
            (head - pressure) / self.inertia_bar_s2_per_l,
            (flow - spraying) * absolute * absolute / self.cushion_bar_l,
            (pressure - shown) / self.transmitter_lag_s,
        )

    def reading(self, state: State) -> float:
        return state[3]


@dataclass(frozen=True, kw_only=True)
class SaltBeam(_NoPipe):
    """Weigh beam of the salt hopper; state: deflection (mm), speed (mm/s); read: deflection.

    A mass on a leaf spring with an oil dashpot; the air's drag grows with the square of speed.
    """

    carried_kg: float = 14.0
    spring_n_per_mm: float = 0.62
    dashpot_n_s_per_mm: float = 0.0105
    drag_n_s2_per_mm2: float = 0.000008  # the hopper's side plates in air
    load_n: float = 2.0  # what lies in the hopper beyond its tare

    def rest(self, level: float) -> tuple[State, float]:
        return (level, 0.0), 0.0  # held there by the latch

    def slope(self, state: State, acting: Acting) -> State:
        deflection, speed = state
        force = (
            self.load_n
            + acting.output
            - self.spring_n_per_mm * deflection
            - self.dashpot_n_s_per_mm * speed
            - self.drag_n_s2_per_mm2 * speed * abs(speed)
        )
        return speed, 1000 * force / self.carried_kg

    def reading(self, state: State) -> float:
        return state[0]
