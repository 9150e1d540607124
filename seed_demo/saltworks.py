"""The Tolmera Salt Gardens: an invented saltworks by an invented sea, its sixteen machines, and what befell each.

Brine stands in shallow pans until the sun has left the salt. Tracked rakes break the crust, rollers firm the clay bunds
between the pans, wheeled carts carry brine and salt, small sounders measure depth. All are steered by the difference of
their sides and calibrated on a concrete slab by the old slipway, where brass marks were set and surveyed.
"""

from __future__ import annotations

from seed_demo.fleet import Change, Make, Story, Vehicle, Work, WrongEntry

NORTH, SOUTH = "North pans", "South pans"

RAKE = Make(
    word="crust rake",
    drive="tracks",
    ruler_m_per_tick=0.000920,
    ruler_width_m=1.180,
    m_per_tick=0.000914,
    width_m=1.620,
    noise_m2_per_m=1.5e-6,
    scale_spread=3e-4,
    ratio_spread=1e-4,
    width_spread=1.0e-3,
    measuring_speed_m_per_s=1.2,
    max_speed_m_per_s=2.0,
    straight_m=20.0,
    radius_m=2.6,
    mark_ahead_m=0.45,
    mark_left_m=0.0,
)

ROLLER = Make(
    word="bund roller",
    drive="tracks",
    ruler_m_per_tick=0.001350,
    ruler_width_m=1.500,
    m_per_tick=0.001362,
    width_m=2.040,
    noise_m2_per_m=2.0e-6,
    scale_spread=3e-4,
    ratio_spread=1e-4,
    width_spread=1.0e-3,
    measuring_speed_m_per_s=1.3,
    max_speed_m_per_s=2.0,
    straight_m=24.0,
    radius_m=3.2,
    mark_ahead_m=-0.3,
    mark_left_m=0.25,
)

HAULER = Make(
    word="salt hauler",
    drive="wheels",
    ruler_m_per_tick=0.000610,
    ruler_width_m=1.320,
    m_per_tick=0.000604,
    width_m=1.960,
    noise_m2_per_m=1.8e-6,
    scale_spread=3e-4,
    ratio_spread=1e-4,
    width_spread=1.0e-3,
    measuring_speed_m_per_s=1.5,
    max_speed_m_per_s=3.0,
    straight_m=24.0,
    radius_m=3.2,
)

CART = Make(
    word="brine cart",
    drive="wheels",
    ruler_m_per_tick=0.000349,
    ruler_width_m=0.740,
    m_per_tick=0.0003472,
    width_m=0.7335,
    noise_m2_per_m=4e-7,
    scale_spread=2e-4,
    ratio_spread=8e-5,
    width_spread=5e-4,
    measuring_speed_m_per_s=1.3,
    max_speed_m_per_s=2.5,
    straight_m=20.0,
    radius_m=2.2,
    mark_ahead_m=0.22,
    mark_left_m=0.0,
)

SOUNDER = Make(
    word="pan sounder",
    drive="wheels",
    ruler_m_per_tick=0.000152,
    ruler_width_m=0.420,
    m_per_tick=0.0001514,
    width_m=0.4158,
    noise_m2_per_m=2.5e-7,
    scale_spread=2e-4,
    ratio_spread=8e-5,
    width_spread=5e-4,
    measuring_speed_m_per_s=0.9,
    max_speed_m_per_s=1.6,
    straight_m=14.0,
    radius_m=1.6,
    mark_ahead_m=0.0,
    mark_left_m=0.08,
    log_rate_hz=25.0,
    lateness_steps=3,
)

_MAKES = (RAKE, ROLLER, HAULER, CART, SOUNDER)

_STORIES: tuple[tuple[str, Make, Story], ...] = (
    ("Avocet", RAKE, Story("steady: nothing happens to it, and nothing should be said")),
    (
        "Stilt",
        CART,
        Story("steady, breathing with the season well inside its tolerance", breathing=0.0008, set_aside_by_hand=0.35),
    ),
    (
        "Dunlin",
        CART,
        Story(
            "both tyres wear slowly; the alert stands, nobody has looked yet",
            changes=(Change(0.05, 1.0, left=-0.020, right=-0.020),),
        ),
    ),
    (
        "Plover",
        CART,
        Story(
            "both tyres wear; the alert is seen and what the evaluation proposes is adopted",
            changes=(Change(0.03, 1.0, left=-0.018, right=-0.018),),
            takes_evaluation_after_days=5,
            acknowledges={"beyond_tolerance": 1},
        ),
    ),
    (
        "Godwit",
        HAULER,
        Story(
            "four new tyres in one night, recorded by nobody",
            changes=(Change(0.90, 0.90, left=0.014, right=0.014),),
            works=(Work(0.2, "towed", None, "pulled out of pan 9 with the winch"),),
            acknowledges={"beyond_tolerance": 2},
        ),
    ),
    (
        "Turnstone",
        ROLLER,
        Story(
            "new tracks, recorded the same morning; questioned until a new baseline stands",
            changes=(Change(0.45, 0.45, left=0.011, right=0.009, width=-0.02),),
            works=(Work(0.45, "part_fitted", "both", "new rubber tracks on both sides, rollers kept"),),
            sessions=(0.0, 0.485),
        ),
    ),
    (
        "Whimbrel",
        RAKE,
        Story(
            "the chain of the right side wears at its pins and pulls the rake to the left",
            changes=(Change(0.15, 1.0, right=0.008),),
            acknowledges={"beyond_tolerance": 1},
        ),
    ),
    (
        "Sanderling",
        SOUNDER,
        Story(
            "steady, but its logger garbles samples; such runs are set aside with the reason",
            faults=(
                (0.10, "spike"),
                (0.19, "reset"),
                (0.31, "spike"),
                (0.44, "no motion"),
                (0.52, "spike"),
                (0.66, "reset"),
                (0.78, "spike"),
                (0.91, "no motion"),
            ),
            slips=(0.27, 0.71),
        ),
    ),
    ("Redshank", SOUNDER, Story("steady on sixteen-bit counters that wrap in every run")),
    (
        "Knot",
        CART,
        Story(
            "drives only closed squares since its baseline, so nobody can see that its tyres wear",
            diet="squares",
            changes=(Change(0.10, 1.0, left=-0.012, right=-0.012),),
        ),
    ),
    ("Ruff", HAULER, Story("laid up in a shed: no run for weeks", last_run=0.62)),
    (
        "Curlew",
        RAKE,
        Story(
            "somebody types a tick factor with two digits exchanged; it is withdrawn and the earlier set reinstated",
            wrong_entry=WrongEntry(0.33, 4),
            acknowledges={"beyond_tolerance": 1},
        ),
    ),
    (
        "Lapwing",
        SOUNDER,
        Story("just arrived: on provisional values of a sister, few runs so far", arrives=0.93, sessions=()),
    ),
    (
        "Oystercatcher",
        HAULER,
        Story(
            "calibrated anew at half-worn tyres, but still boots on the set that it kept",
            changes=(Change(0.05, 0.60, left=-0.0035, right=-0.0035),),
            sessions=(0.0, 0.60),
            deaf_from=0.55,
            acknowledges={"boot_mismatch": 1},
        ),
    ),
    (
        "Shelduck",
        ROLLER,
        Story(
            "tracks tensioned last week: questioned, waiting for its calibration runs",
            works=(Work(0.95, "track_tensioned", "both", "slack taken up after the spring tide, both sides"),),
            changes=(Change(0.95, 0.95, left=0.002, right=0.0015, width=0.004),),
        ),
    ),
    (
        "Tern",
        HAULER,
        Story(
            "ballast moved to the rear axle, recorded by nobody: it turns less than it thinks",
            changes=(Change(0.40, 0.40, width=0.035),),
            slips=(0.2, 0.75),
        ),
    ),
)


def vehicles() -> tuple[Vehicle, ...]:
    """The fleet in the order of its register. Names are those of shore birds, as painted on the machines."""
    found = []
    for index, (bird, make, story) in enumerate(_STORIES):
        found.append(
            Vehicle(
                place=index,
                vehicle_id=bird.lower(),
                name=f"{bird}, {make.word}",
                serial=f"TSG-{100 * (1 + _MAKES.index(make)) + index + 1}",
                site=NORTH if index % 2 == 0 else SOUTH,
                make=make,
                story=story,
                seed=4100 + index,
                counter_bits=16 if bird == "Redshank" else 32,
            )
        )
    return tuple(found)
