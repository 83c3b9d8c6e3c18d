"""Where the model does not reproduce a published figure: both numbers, as data that the documentation and the report can print.

Loop gain is defined differently in different papers, so ratios are compared, never absolute values. The model's numbers are of the starting
case named in `what`; tests/published/test_levers.py works each of them out again.
"""

from __future__ import annotations

from dataclasses import dataclass

__all__ = ["MODEL_LIMITS", "ModelLimit"]


@dataclass(frozen=True)
class ModelLimit:
    """One published figure that the model misses."""

    name: str
    what: str
    unit: str
    published: float
    published_text: str
    """The figure as printed, with its spread where it has one."""
    model: float
    """To three significant figures."""
    source: str
    why: str

    @property
    def sentence(self) -> str:
        unit = f" {self.unit}" if self.unit else ""
        return f"{self.what}: published {self.published_text} ({self.source}), model {self.model:.3g}{unit}. {self.why}"


MODEL_LIMITS: tuple[ModelLimit, ...] = (
    ModelLimit(
        "lung_volume_slope",
        "Slope of ln loop gain on ln(1 / lung volume), heart failure with periodic breathing", "",
        0.9, "0.9 +- 0.1 among patients", 0.209, "Sands 2011, AJRCCM 184:1067",
        "In this loop blood takes up CO2 as PaCO2 rises, three and a half times as fast as ventilation washes it out, so the lung's gas "
        "store matters less at cycles of a minute: without that uptake the slope would be 0.62. CPAP and posture act through lung volume "
        "and are weaker here than in patients.",
    ),
    ModelLimit(
        "lateral_posture_loop_gain",
        "Loop gain on the side over supine, heart failure with periodic breathing", "",
        0.883, "0.883 (0.77 +- 0.15 supine, 0.68 +- 0.14 on the side)", 0.984, "20 patients with obstructive apnoea, PMC5895090",
        "The same cause as the slope on lung volume; posture also changes the airway and oxygen, which the lever leaves out.",
    ),
    ModelLimit(
        "acetazolamide_loop_gain",
        "Loop gain on acetazolamide 1000 mg/day over before, heart failure with periodic breathing", "",
        0.588, "0.588 (3.4, quartiles 2.4 to 5.4, to 2.0, quartiles 1.4 to 3.5)", 0.847, "Edwards 2012, J Physiol 590:1199",
        "The line's shift lowers the steady plant gain by 24 %, as published, but at the cycle's frequency only by the fall of PaCO2. The "
        "median fall is larger than any published change of plant gain explains; the model's stays inside the published quartiles.",
    ),
    ModelLimit(
        "acetazolamide_co2_reserve",
        "Rise of the CO2 reserve on acetazolamide 1000 mg/day, heart failure with periodic breathing", "mmHg",
        1.1, "1.0 and 1.2 mmHg (3.0 to 4.0 and 2.2 to 3.4)", 0.344, "PMC7191512",
        "With the slope kept the reserve grows only as ventilation does.",
    ),
    ModelLimit(
        "acetazolamide_plant_gain_able_bodied",
        "Steady plant gain on acetazolamide over before, from the PETCO2 of the able-bodied group", "",
        0.759, "0.759 (5.4 +- 1.8 to 4.1 +- 1.7)", 0.649, "PMC7191512",
        "By the alveolar ventilation equation plant gain goes as PCO2 squared, and (32.3 / 40.1)^2 is less than the paper's own ratio; in its "
        "other group both agree (0.81 and 0.80).",
    ),
    ModelLimit(
        "oxygen_peripheral_heavy",
        "Loop gain on 2 L/min of oxygen over before, heart failure with periodic breathing (gains half peripheral)", "",
        0.493, "0.493 (0.69 +- 0.18 to 0.34 +- 0.04)", 0.208, "Wellman 2008, Respir Physiol Neurobiol 162:144",
        "The multiplier exp(-0.05 (PaO2 - 100)) has no floor, so 2 L/min all but abolishes the peripheral path.",
    ),
    ModelLimit(
        "oxygen_central_heavy",
        "Loop gain on 2 L/min of oxygen over before, idiopathic central apnoea (gains one seventh peripheral)", "",
        0.493, "0.493 (0.69 +- 0.18 to 0.34 +- 0.04)", 0.873, "Wellman 2008, Respir Physiol Neurobiol 162:144",
        "With printed gains most of the loop is central, which oxygen does not reach. The published fall lies between the two splits, and the "
        "split is the least well known number of the loop.",
    ),
    ModelLimit(
        "printed_gain_split_cycle",
        "Cycle length with the gains as single-breath and rebreathing tests print them (0.58 and 5.8), heart failure", "s",
        59.0, "59.0 +- 4.9 s", 91.2, "Hall 1996, AJRCCM 154:376; gains of Solin 2000, AJRCCM 162:2194",
        "Linear cycle at the phase crossover. The starting case takes a peripheral-heavy split of a smaller total, which gives 60 s.",
    ),
)  # fmt: skip
