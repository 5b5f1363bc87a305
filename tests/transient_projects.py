"""Small random projects for switch-on, with converters that start, trip and start again."""

from __future__ import annotations

import math
import random

from budget.engine.model import Branch, Bus, Case, Converter, Filter, Lead, Output, Project, Rules


def random_project(seed: int) -> Project:
    """One or two filters and up to three converters on 20 to 30 V; the same project for the same seed."""
    r = random.Random(seed)

    def spread(a: float, b: float) -> float:
        return math.exp(r.uniform(math.log(a), math.log(b)))

    count = r.choice([1, 1, 2])
    filters = []
    for k in range(count):
        saturation = r.choice([None, spread(5, 40)])
        across = r.choice([None, spread(50, 500)]) if count == 1 else spread(20, 200)
        dm = [Branch("series", R=spread(5e-3, 50e-3), L=spread(2e-6, 30e-6), Rp=across, saturation=saturation)]
        dm.append(Branch("shunt", R=r.choice([0.0, spread(2e-3, 50e-3)]), C=spread(2e-6, 50e-6)))
        if r.random() < 0.6:
            dm.append(Branch("shunt", R=spread(0.1, 1), C=spread(10e-6, 300e-6)))
        if r.random() < 0.3:
            bent = r.choice([None, spread(5, 40)])
            dm.append(Branch("series", R=spread(5e-3, 50e-3), L=spread(1e-6, 10e-6), saturation=bent))
            dm.append(Branch("shunt", R=spread(2e-3, 50e-3), C=spread(2e-6, 50e-6)))
        filters.append(Filter(f"F{k}", dm=tuple(dm)))
    converters = []
    for k in range(r.choice([1, 2, 3])):
        on = r.uniform(13, 19.5)
        ladder: tuple[Branch, ...] = ()
        lead = Lead(R=r.choice([0.0, spread(5e-3, 0.1)]))
        kind = r.random()
        if kind < 0.5:
            lead = Lead(R=spread(5e-3, 0.1), L=spread(1e-7, 2e-6))
            ladder = (Branch("shunt", R=spread(2e-3, 0.05), C=spread(2e-6, 50e-6)),)
        elif kind < 0.7:
            lead = Lead(R=spread(5e-3, 0.1))
            choke = Branch("series", R=0.01, L=spread(1e-6, 8e-6), saturation=r.choice([None, 6.0]))
            ladder = (choke, Branch("shunt", R=spread(2e-3, 0.05), C=spread(2e-6, 50e-6)))
        power = spread(10, 120)
        converters.append(
            Converter(
                f"C{k}",
                rated_power=power,
                output=(Output("o", 5.0, power / 5),),
                efficiency=((1.0, 0.9),),
                filter=f"F{k % count}",
                min_input=on,
                turn_on=on,
                turn_off=on * r.uniform(0.85, 0.99),
                start_delay=r.choice([0.0, spread(1e-4, 2e-3)]),
                soft_start=r.choice([0.0, spread(2e-4, 2e-3)]),
                output_capacitance=r.choice([None, spread(1e-5, 1e-3)]),
                lead=lead,
                input=ladder,
            )
        )
    bus = Bus(
        20.0,
        24.0,
        30.0,
        resistance=r.choice([spread(0.01, 0.1), spread(0.1, 0.8)]),
        inductance=r.choice([0.0, spread(2e-7, 2e-6)]),
        rise=r.choice([0.0, spread(1e-5, 1e-3)]),
        surge=45.0,
        surge_time=1e-3,
        surge_rise=r.choice([0.0, 2e-4]),
    )
    return Project(bus, tuple(filters), tuple(converters), (Case("full"),), Rules(inrush_window=5e-3))
