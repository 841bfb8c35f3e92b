"""Write the readings of the invented examples: `python datasets/make_demo.py`.

The responses come from the finite elements of `tests/referees`, which share nothing with the
package; the noise comes from one seed. All members, loads and readings are invented.
"""

from __future__ import annotations

import csv
import sys
from pathlib import Path

import numpy as np

ROOT = Path(__file__).resolve().parent.parent
sys.path.insert(0, str(ROOT / "tests"))

from referees import beams, second_order  # noqa: E402

SEED = 2026
RIGID = float("inf")


def ground_beam():
    """Deflection [m] at 16 cells of the ground beam, and the truth in kN."""
    x = np.arange(0.0, 31.0, 2.0)
    beam = beams.Beam(30.0, 768e6, foundation=12e6)
    loads = [(6.0, 12.0, 60e3), (17.0, 21.0, 95e3)]
    solved = beams.bend(beam, loads, [(26.0, 180e3)], size=1.0, places=x)
    return x, solved.at("deflection", x)


def girder():
    """Strain gauges, prisms and pier of the girder whose pier at 24 m went down by 9 mm."""
    gauges = 1.5 + 3.0 * np.arange(26)
    prisms = np.array([4.0, 8.0, 12.0, 16.0, 30.0, 35.0, 40.0, 46.0, 62.0, 70.0])
    beam = beams.Beam(
        78.0, 4.2e9, left=beams.PINNED, right=beams.PINNED,
        supports=((24.0, RIGID, 9e-3), (54.0, RIGID, 0.0)),
    )  # fmt: skip
    loads = [(0.0, 78.0, 8e3), (36.0, 46.0, 22e3)]
    solved = beams.bend(beam, loads, size=3.0, places=[*gauges, *prisms])
    strain = 0.95 * solved.at("curvature", gauges)
    return gauges, strain, prisms, solved.at("deflection", prisms), solved


def busbar():
    """Temperature [degC] at 20 thermocouples of the busbar with a hot joint."""
    x = 0.06 + 0.12 * np.arange(20)
    bar = second_order.Line(0.0, 2.4, 0.385, 2.42, left=(RIGID, 23.0), right=(RIGID, 19.0))
    heat = [(0.0, 2.4, 51.0), (1.30, 1.40, 560.0), (0.55, 0.65, 77.0)]
    return x, 32.0 + second_order.settle(bar, heat, size=0.1, places=x).at("response", x)


def cable():
    """Fibre temperature [degC], averaged over 1.2 m, every 0.5 m along the cable."""
    x = 2.0 + 0.5 * np.arange(793)
    moist, dry = 1 / 0.90, 1 / 1.35
    soil = [(0.0, 318.0, moist), (318.0, 340.0, dry), (340.0, 400.0, moist)]
    line = second_order.Line(0.0, 400.0, 0.243, soil)
    heat = [(0.0, 400.0, 22.0), (148.5, 151.5, 35.0), (260.0, 266.0, 18.0)]
    solved = second_order.settle(line, heat, degree=8, size=0.5)
    t, w = np.polynomial.legendre.leggauss(12)
    # the gauge is cut at the elements' edges, so that the average is exact
    edges = np.arange(-0.6, 0.61, 0.1)
    spots = (edges[:-1, None] + edges[1:, None]) / 2 + 0.05 * t
    u = solved.at("response", (x[:, None] + spots.ravel()).ravel()).reshape(len(x), -1)
    return x, 12.0 + u @ np.tile(w * 0.05, len(spots)) / 1.2


def sediment():
    """Pore-water concentration [Bq/m3], averaged over slices of 1.5 cm."""
    x = 0.0075 + 0.015 * np.arange(20)
    column = second_order.Line(0.0, 0.30, 0.7 * 6e-10, 0.7 * 2.098e-6, left=(RIGID, 150.0))
    made = [(0.0, 0.30, 0.7 * 4.0e-3), (0.09, 0.13, 0.7 * 2.5e-2)]
    solved = second_order.settle(column, made, size=0.005, degree=8)
    t, w = np.polynomial.legendre.leggauss(12)
    spots = np.concatenate([shift + 0.00125 * t for shift in np.arange(-0.00625, 0.0065, 0.0025)])
    u = solved.at("response", (x[:, None] + spots).ravel()).reshape(len(x), -1)
    return x, u @ np.tile(w / 12, 6)


def ring():
    """Head [m] in observation wells around a pumped well inside an infiltration ring."""
    x = np.array([1.5, 4.0, 9.0, 16.0, 24.0, 32.0, 39.0, 45.0, 50.0, 56.0, 62.0, 72.0, 90.0,
                  115.0, 145.0, 180.0, 215.0, 240.0])  # fmt: skip
    ground = second_order.Line(0.3, 250.0, 8e-3, right=(RIGID, 0.0), geometry="cylinder")
    day = 1e-3 / 86400.0  # 1 mm/d
    seepage = [(0.3, 250.0, 0.6 * day), (40.0, 60.0, 200.0 * day)]
    edges = np.geomspace(0.3, 250.0, 30)
    solved = second_order.settle(ground, seepage, [(0.3, -0.020)], places=[*edges, *x])
    return x, 24.0 + solved.at("response", x)


def floor(pipe, room):
    """Temperature [degC] at 24 sensors of a floor strip, the pipe run giving `pipe` W/m."""
    x = 0.1875 + 0.375 * np.arange(24)
    strip = second_order.Line(0.0, 9.0, 0.525, 6.0)
    heat = [(0.0, 9.0, 14.0), (3.0, 5.5, pipe), (6.5, 8.5, 40.0)]
    return x, room + second_order.settle(strip, heat, size=0.25, places=x).at("response", x)


def autoregressive(rng, sd, lag, count):
    """Stationary noise whose neighbours correlate by `lag`."""
    e = rng.normal(0.0, sd, count)
    out = np.empty(count)
    out[0] = e[0]
    for i in range(1, count):
        out[i] = lag * out[i - 1] + np.sqrt(1 - lag**2) * e[i]
    return out


def write(path, preamble, header, rows):
    """One file as a logger would export it."""
    path.parent.mkdir(parents=True, exist_ok=True)
    with path.open("w", newline="", encoding="utf-8") as out:
        out.writelines(f"# {line}\n" for line in preamble)
        writer = csv.writer(out, lineterminator="\n")
        writer.writerow(header)
        writer.writerows(rows)


def named(letters, x, values, decimals):
    """Rows (name, place, value)."""
    pairs = enumerate(zip(x, values, strict=True), 1)
    return [(f"{letters}{i:02d}", f"{a:.2f}", f"{b:.{decimals}f}") for i, (a, b) in pairs]


def main(folder=ROOT / "examples"):
    """Write every file of readings below `folder`."""
    rngs = [np.random.default_rng(s) for s in np.random.SeedSequence(SEED).spawn(8)]
    invented = "invented readings, made by datasets/make_demo.py"

    x, w = ground_beam()
    w = 1e3 * w + rngs[0].normal(0.0, 0.10, len(x))
    cells = [f"SC{i:02d}" for i in range(1, len(x) + 1)]
    head = ["cell", "x [m]", "w [mm]"]
    write(
        folder / "ground_beam" / "settlement.csv",
        [invented, "16 hydrostatic settlement cells, zeroed before loading, tied to a benchmark"],
        head,
        [(c, f"{a:.1f}", f"{b:.3f}") for c, a, b in zip(cells, x, w, strict=True)],
    )
    write(
        folder / "ground_beam_datum" / "settlement.csv",
        [invented, "16 hydrostatic settlement cells; the reference cell was moved"],
        head,
        [(c, f"{a:.1f}", f"{b + 0.35:.3f}") for c, a, b in zip(cells, x, w, strict=True)],
    )

    gauges, strain, prisms, sag, _ = girder()
    strain = 1e6 * strain + rngs[1].normal(0.0, 2.0, len(gauges))
    sag = 1e3 * sag + rngs[1].normal(0.0, 0.5, len(prisms))
    pier = 9.0 + rngs[1].normal(0.0, 0.3)
    place = folder / "girder_settled_pier"
    write(
        place / "strain.csv",
        [invented, "gauges 0.95 m below the axis, zeroed before the deck was loaded"],
        ["gauge", "x [m]", "strain [ue]"],
        named("G", gauges, strain, 1),
    )
    write(
        place / "levelling.csv",
        [invented, "prisms (total station) and the pier head (levelling), down is positive"],
        ["point", "method", "x [m]", "w [mm]"],
        [
            *((f"P{i:02d}", "prism", f"{a:.2f}", f"{b:.1f}")
              for i, (a, b) in enumerate(zip(prisms, sag, strict=True), 1)),
            ("PIER2", "levelling", "24.00", f"{pier:.1f}"),
        ],
    )  # fmt: skip

    x, T = busbar()
    T = T + rngs[2].normal(0.0, 0.4, len(x))
    write(
        folder / "busbar_joint" / "temperatures.csv",
        [invented, "20 thermocouples glued to the bar, steady state at 1600 A, mean of 10 min"],
        ["channel", "x [m]", "T [degC]"],
        named("TC", x, T, 2),
    )

    x, T = cable()
    T = T + autoregressive(rngs[3], 0.3, 0.5, len(x)) + 0.6 * (x > 220.0)
    write(
        folder / "buried_cable" / "fibre.csv",
        [invented, "fibre in the cable's screen, sampled every 0.5 m, spatial resolution 1.2 m"],
        ["x [m]", "T [degC]"],
        [(f"{a:.1f}", f"{b:.2f}") for a, b in zip(x, T, strict=True)],
    )

    x, C = sediment()
    C = C + rngs[4].normal(0.0, np.hypot(0.08 * C, 60.0))
    u = np.hypot(0.08 * C, 60.0)
    write(
        folder / "sediment_column" / "radon.csv",
        [invented, "Rn-222 in pore water, middles of slices of 1.5 cm, u: standard uncertainty"],
        ["slice", "depth [cm]", "C [Bq/m^3]", "u [Bq/m^3]"],
        [(i, f"{100 * a:.2f}", f"{b:.0f}", f"{s:.0f}")
         for i, (a, b, s) in enumerate(zip(x, C, u, strict=True), 1)],
    )  # fmt: skip

    x, h = ring()
    h = h + rngs[5].normal(0.0, 0.003, len(x))
    write(
        folder / "infiltration_ring" / "heads.csv",
        [invented, "18 observation wells, pressure probes, mean of a week, head above datum"],
        ["well", "r [m]", "head [m]"],
        named("OW", x, h, 3),
    )

    campaigns = (("before", 80.0, 20.4, rngs[6]), ("after", 12.0, 18.9, rngs[7]))
    for campaign, pipe, room, rng in campaigns:
        x, T = floor(pipe, room)
        T = T + 1.3 + rng.normal(0.0, 0.15, len(x))
        write(
            folder / "insulated_pipe" / f"{campaign}.csv",
            [invented, f"24 sensors in the screed, {campaign} the pipe was insulated, mean of 1 h",
             "the logger's cold junction reads a little high, by how much is not known"],
            ["sensor", "x [m]", "T [degC]"],
            named("F", x, T, 2),
        )  # fmt: skip


if __name__ == "__main__":
    main()
