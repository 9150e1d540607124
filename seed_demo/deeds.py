"""What people and vehicles do on a day, each through the real procedure that the doors call.

Every deed takes the services with the clock of its moment. A deed never writes to storage itself; the few reads are
what a person would look up on a page before acting.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from datetime import timedelta
from secrets import token_urlsafe

from registry.domain.boot import BootStatement
from registry.domain.person import Actor, Role
from registry.domain.vehicle import Parameters, ReferencePoint, VehicleStatement
from registry.procedures import adoption, alerting, baseline, boot, intake, maintenance, people, registration
from registry.services import Services
from registry.storage import alerts, calibrations, in_force
from seed_demo.beside import MakePass
from seed_demo.drives import DrivenRun
from seed_demo.fleet import Vehicle, Work

KEEPER, APPROVER, TECHNICIAN, READER = "Marit", "Oskar", "Jonna", "Pan office"
STAFF: dict[str, Role] = {
    KEEPER: "keeper",
    APPROVER: "approver",
    TECHNICIAN: "technician",
    "Tarek": "technician",
    "Beni": "technician",
    READER: "reader",
}
SOFTWARE = "field controller 2.3"


@dataclass
class Loaded:
    """What a vehicle carries in its own store."""

    calibration_number: int
    digest: str
    fetched: float


@dataclass
class Memory:
    """What the people and vehicles of the demo remember between their deeds."""

    session_runs: dict[str, list[str]] = field(default_factory=dict)
    last_run: dict[str, str] = field(default_factory=dict)
    loaded: dict[str, Loaded] = field(default_factory=dict)
    wrong: dict[str, tuple[str, int]] = field(default_factory=dict)
    to_start: set[str] = field(default_factory=set)
    deaf: set[str] = field(default_factory=set)
    news: set[str] = field(default_factory=set)
    registered: set[str] = field(default_factory=set)

    def renewed(self, vehicle: Vehicle) -> None:
        """Other parameters are in force: the vehicle is to load them, and the evening's pass to look at it."""
        self.to_start.add(vehicle.vehicle_id)
        self.news.add(vehicle.vehicle_id)


def person(name: str) -> Actor:
    return Actor("person", name, STAFF[name])


def hire(services: Services) -> tuple[str, str]:
    """Everybody gets an account and a random password; answers the approver's sign-in."""
    passwords = {name: token_urlsafe(9) for name in STAFF}
    for name, role in STAFF.items():
        people.add_person(services, Actor("local", "demo"), name, role, passwords[name])
    return APPROVER, passwords[APPROVER]


def register(services: Services, vehicle: Vehicle, borrowed_from: Vehicle | None, memory: Memory) -> None:
    """Enter the vehicle with its ruler values, give it a key and provisional parameters to drive its first runs on."""
    make = vehicle.make
    nominal = Parameters(make.ruler_m_per_tick, make.ruler_m_per_tick, make.ruler_width_m)
    statement = VehicleStatement(
        name=vehicle.name,
        drive=make.drive,
        nominal=nominal,
        max_speed_m_per_s=make.max_speed_m_per_s,
        site=vehicle.site,
        serial=vehicle.serial,
        counter_bits=vehicle.counter_bits,
        reference_point=ReferencePoint(make.mark_ahead_m, make.mark_left_m),
    )
    registration.put_vehicle(services, person(APPROVER), vehicle.vehicle_id, statement, None)
    memory.registered.add(vehicle.vehicle_id)
    people.issue_key(services, person(KEEPER), vehicle_id=vehicle.vehicle_id)
    values, shares, note = nominal, (0.02, 0.02, 0.3), "as measured with a ruler, to drive the calibration runs on"
    if borrowed_from is not None:
        values, shares = _known(services, borrowed_from, nominal), (0.006, 0.006, 0.015)
        note = f"borrowed from {borrowed_from.name}, until the calibration runs are driven"
    u = (values.left_m_per_tick * shares[0], values.right_m_per_tick * shares[1], values.width_m * shares[2])
    proposed = baseline.propose_entered(
        services, person(TECHNICIAN), vehicle.vehicle_id, "provisional", values, u, note
    )
    adoption.adopt(services, person(APPROVER), proposed.calibration_id, "to drive the calibration runs")


def _known(services: Services, vehicle: Vehicle, otherwise: Parameters) -> Parameters:
    with services.read() as c:
        current = in_force.in_force(c, vehicle.vehicle_id, services.now())
        if current is None or current.calibration_id is None:
            return otherwise
        return calibrations.by_id(c, current.calibration_id).result.parameters


def hand_in(services: Services, run: DrivenRun, memory: Memory) -> None:
    """The driver hands in log and reading. Nothing is said here of what the world knows."""
    plan = run.plan
    closure = run.closure
    body = {
        "run_key": plan.run_key,
        "time_s": run.time_s.tolist(),
        "left_counts": run.left_counts.tolist(),
        "right_counts": run.right_counts.tolist(),
        "closure": vars(closure),
    }
    duration = timedelta(seconds=float(run.time_s[-1]))
    statement = intake.RunStatement(
        run_key=plan.run_key,
        started_at=services.now() - duration - timedelta(minutes=4),
        time_s=run.time_s,
        left_counts=run.left_counts,
        right_counts=run.right_counts,
        closure=closure,
        conditions=plan.conditions(),
        content_digest=intake.content_digest(body),
    )
    taken, _ = intake.take_run(services, person(plan.driver), plan.vehicle.vehicle_id, statement)
    memory.last_run[plan.vehicle.vehicle_id] = taken.run_id
    memory.news.add(plan.vehicle.vehicle_id)
    memory.session_runs.setdefault(f"{plan.vehicle.vehicle_id}/{plan.day}", []).append(taken.run_id)


def set_new_baseline(
    services: Services, vehicle: Vehicle, memory: Memory, run_ids: tuple[str, ...] | None, reason: str
) -> None:
    """The technician fits and proposes, the approver puts into force."""
    proposed = baseline.propose_baseline(services, person(TECHNICIAN), vehicle.vehicle_id, run_ids, reason)
    adoption.adopt(services, person(APPROVER), proposed.calibration_id, reason, number=proposed.number)
    memory.renewed(vehicle)


def work(services: Services, vehicle: Vehicle, done: Work, memory: Memory) -> None:
    memory.news.add(vehicle.vehicle_id)
    maintenance.record_maintenance(
        services,
        person("Beni"),
        vehicle.vehicle_id,
        services.now() - timedelta(hours=1),
        done.kind,
        done.side,
        done.note,
    )


def set_aside_last(services: Services, vehicle: Vehicle, memory: Memory) -> None:
    memory.news.add(vehicle.vehicle_id)
    reason = "the observer saw the right wheel climb the joint of the slab"
    intake.set_aside(services, person(APPROVER), memory.last_run[vehicle.vehicle_id], reason)


def enter_wrongly(services: Services, vehicle: Vehicle, memory: Memory) -> None:
    """Type the left tick factor with its last two unlike digits exchanged; the approver does not look closely."""
    with services.read() as c:
        current = in_force.in_force(c, vehicle.vehicle_id, services.now())
        if current is None or current.calibration_id is None or current.number is None:
            raise RuntimeError(f"{vehicle.vehicle_id} has nothing in force to be typed wrongly")
        result = calibrations.by_id(c, current.calibration_id).result
    meant = result.parameters
    typed = replace(meant, left_m_per_tick=float(exchanged_digits(f"{1000 * meant.left_m_per_tick:.4f}")) / 1000)
    u = tuple(value * result.covariance_relative[i][i] ** 0.5 for i, value in enumerate(meant.as_tuple()))
    proposed = baseline.propose_entered(
        services,
        person("Tarek"),
        vehicle.vehicle_id,
        "entered",
        typed,
        (u[0], u[1], u[2]),
        "copied from the paper sheet",
    )
    adoption.adopt(
        services, person(APPROVER), proposed.calibration_id, "paper sheet of the spring check", number=proposed.number
    )
    memory.wrong[vehicle.vehicle_id] = (proposed.calibration_id, current.number)
    memory.renewed(vehicle)


def exchanged_digits(text: str) -> str:
    """The number with its last two unlike neighbouring digits exchanged: 0.9183 becomes 0.9138."""
    for last in range(len(text) - 1, 0, -1):
        before, after = text[last - 1], text[last]
        if before.isdigit() and after.isdigit() and before != after:
            return text[: last - 1] + after + before + text[last + 1 :]
    return text


def withdraw_wrong(services: Services, vehicle: Vehicle, memory: Memory) -> None:
    calibration_id, number = memory.wrong[vehicle.vehicle_id]
    reason = "two digits of the left tick factor exchanged when it was typed"
    adoption.withdraw(services, person(APPROVER), calibration_id, reason, "reinstate", number)
    memory.renewed(vehicle)


def go_deaf(_: Services, vehicle: Vehicle, memory: Memory) -> None:
    """Its radio fails: from now on the vehicle starts on what it has kept."""
    memory.deaf.add(vehicle.vehicle_id)


def start_up(services: Services, vehicle: Vehicle, memory: Memory) -> None:
    """The vehicle fetches its parameters and reports them; a deaf one loads what it has kept."""
    now = services.now()
    actor = Actor("vehicle", vehicle.vehicle_id)
    kept = memory.loaded.get(vehicle.vehicle_id)
    if vehicle.vehicle_id in memory.deaf and kept is not None:
        age = now.timestamp() - kept.fetched
        statement = BootStatement(kept.calibration_number, kept.digest, "kept", now, age, SOFTWARE)
    else:
        sheet = boot.parameters(services, actor, vehicle.vehicle_id, None, None)
        memory.loaded[vehicle.vehicle_id] = Loaded(sheet.calibration_number, sheet.digest, now.timestamp())
        statement = BootStatement(sheet.calibration_number, sheet.digest, "fetched", now, 0.0, SOFTWARE)
    boot.report_boot(services, actor, vehicle.vehicle_id, statement)


def evening_pass(services: Services, memory: Memory, make_pass: MakePass, everybody: bool) -> None:
    """The schedule's pass: over the whole fleet, or over the vehicles of which something new came in today."""
    vehicle_ids = sorted(memory.registered if everybody else memory.news)
    memory.news.clear()
    if vehicle_ids:
        make_pass(services, vehicle_ids)


def morning_desk(services: Services, fleet: tuple[Vehicle, ...], memory: Memory) -> None:
    """Start again what was given new parameters yesterday; see to alerts and proposals, where a story has it."""
    for vehicle in fleet:
        if vehicle.vehicle_id in memory.to_start:
            start_up(services, vehicle, memory)
    memory.to_start.clear()
    stories = {vehicle.vehicle_id: vehicle.story for vehicle in fleet}
    now = services.now()
    with services.read() as c:
        standing = alerts.all_open(c)
    for alert in standing:
        story = stories.get(alert.vehicle_id or "")
        days = story.acknowledges.get(alert.content.kind) if story else None
        if (
            days is not None
            and alert.standing in ("unacknowledged", "returned")
            and now - alert.raised_at >= timedelta(days=days)
        ):
            alerting.acknowledge(services, person(TECHNICIAN), alert.alert_id, "seen; will be looked at")
    for vehicle in fleet:
        if vehicle.story.takes_evaluation_after_days is not None:
            _adopt_evaluation(services, vehicle, memory, timedelta(days=vehicle.story.takes_evaluation_after_days))


def _adopt_evaluation(services: Services, vehicle: Vehicle, memory: Memory, after: timedelta) -> None:
    with services.read() as c:
        waiting = calibrations.open_proposals(c, vehicle.vehicle_id, "evaluation")
    for proposed in waiting:
        if services.now() - proposed.recorded_at >= after:
            reason = "worn tyres: what the evaluation found from the runs since the last baseline"
            adoption.adopt(services, person(APPROVER), proposed.calibration_id, reason, number=proposed.number)
            memory.renewed(vehicle)
