"""The reflex loop's numbers: unit, range, typical band, spread among persons, source; its starting cases (the ankle)."""

from lagscape.case.parameters import ParameterSpecification, StartingCase

__all__ = ["SPECIFICATIONS", "STARTING_CASES"]

_COMPUTED = "Range inside which the loop hunts within the clonus band of 3 to 7 Hz (computed); no measured source."

SPECIFICATIONS: tuple[ParameterSpecification, ...] = (
    ParameterSpecification(
        "inertia_kg_m2", "Limb inertia", "J", "kg m2", "Limb", 0.0005, 1.0, 0.03, 0.02, 0.05, 0.25, "lognormal",
        "Moment of inertia of the moving part about the joint.", _COMPUTED, 0.1,
    ),
    ParameterSpecification(
        "stiffness_n_m_rad", "Joint stiffness", "k", "N m/rad", "Limb", 0.1, 500.0, 40.0, 30.0, 60.0, 0.25, "lognormal",
        "Passive and tonic stiffness about the joint.", _COMPUTED, 0.1,
    ),
    ParameterSpecification(
        "damping_n_m_s_rad", "Joint damping", "b", "N m s/rad", "Limb", 0.0, 20.0, 0.35, 0.2, 0.8, 0.30, "lognormal",
        "Passive damping about the joint.", "Common practice, no source.", 0.15,
    ),
    ParameterSpecification(
        "held_mass_kg", "Held mass", "m", "kg", "Limb", 0.0, 20.0, 0.0, 0.0, 1.0, 0.01, "normal",
        "A weight fixed to the limb; it adds inertia and a torque to hold.", "Set by the examiner.", 0.01,
    ),
    ParameterSpecification(
        "load_distance_m", "Distance of the mass", "l", "m", "Limb", 0.01, 1.0, 0.15, 0.05, 0.3, 0.05, "lognormal",
        "From the joint to the held mass.", "Set by the examiner.", 0.03,
    ),
    ParameterSpecification(
        "path_length_m", "Nerve path length", "path", "m", "Conduction", 0.05, 1.5, 0.85, 0.7, 1.0, 0.08, "lognormal",
        "From the muscle to the spinal cord, one way.", "Common practice, no source.", 0.03,
    ),
    ParameterSpecification(
        "afferent_velocity_m_s", "Afferent velocity", "v_a", "m/s", "Conduction", 5.0, 90.0, 55.0, 48.0, 65.0, 0.10, "lognormal",
        "Conduction velocity of the spindle afferents.", "Near motor velocity or faster: common practice, no source.", 0.05,
    ),
    ParameterSpecification(
        "efferent_velocity_m_s", "Efferent velocity", "v_e", "m/s", "Conduction", 5.0, 90.0, 50.0, 42.2, 59.3, 0.09, "lognormal",
        "Motor conduction velocity.", "Tibial 50.7 (42.2 to 59.3) m/s, published reference range.", 0.04,
    ),
    ParameterSpecification(
        "fixed_delay_s", "Synapse, junction and coupling", "tau_0", "s", "Conduction", 0.0, 0.1, 0.0125, 0.008, 0.02, 0.20,
        "lognormal", "Synaptic, neuromuscular and electromechanical delay together.", "Common practice, no source.", 0.1,
    ),
    ParameterSpecification(
        "activation_time_s", "Activation time", "tau_m", "s", "Muscle", 0.005, 0.3, 0.045, 0.03, 0.06, 0.20, "lognormal",
        "Time constant of the muscle's activation, used twice in a row.", _COMPUTED, 0.1,
    ),
    ParameterSpecification(
        "largest_torque_n_m", "Largest torque", "Tmax", "N m", "Muscle", 0.1, 300.0, 10.0, 5.0, 40.0, 0.3, "lognormal",
        "Where the reflex torque saturates; it sets the size of the shaking, not whether it starts.", "Common practice, no source.", 0.15,
    ),
    ParameterSpecification(
        "reflex_gain_per_rad", "Reflex gain", "G", "1/rad", "Reflex", 0.0, 500.0, 0.6, 0.2, 1.2, 0.4, "lognormal",
        "Activation per radian of stretch: the sensitivity. Hyperreflexia raises it.", "Common practice, no source.", 0.2,
    ),
    ParameterSpecification(
        "velocity_sensitivity_s", "Velocity sensitivity", "c", "s", "Reflex", 0.0, 0.5, 0.07, 0.05, 0.10, 0.2, "lognormal",
        "How much the spindle answers to speed of stretch against length.", _COMPUTED, 0.1,
    ),
)  # fmt: skip

STARTING_CASES: tuple[StartingCase, ...] = (
    StartingCase(
        "ankle-calm", "Ankle, ordinary reflex", "Invented: an adult with an ordinary ankle reflex. A tap dies out.",
        {"reflex_gain_per_rad": 0.6},
        source="Typical values; see each number.",
    ),
    StartingCase(
        "ankle-clonus", "Ankle clonus", "Invented: a brisk ankle reflex after an upper motor neurone lesion. The foot beats on.",
        {"reflex_gain_per_rad": 3.0},
        source="Typical values with a raised reflex gain; the clonus band is 3 to 7 Hz (Rack, Ross and Thilmann 1984).",
    ),
)  # fmt: skip
