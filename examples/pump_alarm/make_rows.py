"""Invented rows for the example: no pump, site or measurement here is real.

Twelve irrigation pumps draw from wells and channels. A pump cavitates when the pressure at its inlet comes too close to
the vapour pressure of the water: the available head (NPSH_a) falls below what the impeller needs (NPSH_r), which grows
with the flow. Vibration rises, and the motor current sags a little. Someone listened to the pump and wrote down the
state, not always rightly.

    python make_rows.py            # writes runs.csv beside this file
"""

import csv
import math
import random
from pathlib import Path

SEED = 20
PUMPS = 12
ROWS_PER_PUMP = 250
HEADER = (
    "Pump",
    "Suction pressure",
    "Flow",
    "Motor current",
    "Vibration",
    "Water temperature",
    "Impeller",
    "Hours",
    "State",
)
# Head that each impeller needs at rated flow, in m, and its vibration without cavitation, in mm/s.
IMPELLERS = {"closed": (3.2, 1.6), "semi_open": (3.8, 2.0), "open": (4.5, 2.4)}


def vapour_pressure(celsius: float) -> float:
    """Magnus formula over water, in kPa (Alduchov and Eskridge 1996)."""
    return 0.61094 * math.exp(17.625 * celsius / (celsius + 243.04))


def run(pump: dict[str, float | str], rng: random.Random) -> tuple[str, ...]:
    """One run of one pump, as the logger wrote it."""
    impeller = str(pump["impeller"])
    needed_at_rated, quiet = IMPELLERS[impeller]
    celsius = min(44.0, max(3.0, rng.gauss(20.0, 8.0)))
    load = min(1.3, max(0.35, rng.gauss(0.85, 0.17)))
    flow = load * float(pump["rated_flow"])
    suction = float(pump["lift"]) - 8.0 * load**2 + rng.gauss(0.0, 13.0)  # kPa above the atmosphere
    suction = min(240.0, max(-92.0, suction))
    available = (101.3 + suction - vapour_pressure(celsius)) / 9.81
    needed = needed_at_rated * (0.45 + 0.55 * load**2) * float(pump["wear"])
    margin = available - needed  # m
    cavitating = rng.random() < 1.0 / (1.0 + math.exp(1.7 * (margin - 0.9)))
    current = float(pump["rated_current"]) * (0.45 + 0.55 * load) * rng.gauss(1.0, 0.03) * (0.97 if cavitating else 1.0)
    vibration = quiet * math.exp(rng.gauss(0.0, 0.28)) * (0.8 + 0.3 * load) * (1.45 if cavitating else 1.0)
    heard = cavitating if rng.random() > 0.015 else not cavitating
    return (
        str(pump["name"]),
        f"{suction:.1f}",
        f"{flow:.1f}",
        f"{current:.2f}",
        f"{min(vibration, 25.0):.2f}",
        f"{celsius:.1f}" if rng.random() > 0.02 else "",  # the probe comes unplugged
        impeller,
        f"{rng.uniform(0.5, 9.0):.1f}",
        "cavitating" if heard else "sound",
    )


def main() -> None:
    rng = random.Random(SEED)
    pumps = [
        {
            "name": f"P{number:02d}",
            "impeller": list(IMPELLERS)[number % len(IMPELLERS)],
            "rated_flow": rng.uniform(60.0, 95.0),
            "rated_current": rng.uniform(24.0, 40.0),
            "lift": rng.uniform(-48.0, -8.0),
            "wear": rng.uniform(0.95, 1.2),
        }
        for number in range(1, PUMPS + 1)
    ]
    rows = [run(pump, rng) for _ in range(ROWS_PER_PUMP) for pump in pumps]
    with (Path(__file__).parent / "runs.csv").open("w", encoding="utf-8", newline="") as stream:
        writer = csv.writer(stream, lineterminator="\n")
        writer.writerow(HEADER)
        writer.writerows(rows)


if __name__ == "__main__":
    main()
