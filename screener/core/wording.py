"""What the lines of evidence and their numbers are called in sentences for a reader.

Inside, a test has an identifier and its numbers have names; a person who is handed a verdict knows
neither. A test or number of somebody's own that is not listed keeps its name.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

__all__ = ["QUANTITIES", "TESTS", "Quantity", "TestWords"]


@dataclass(frozen=True)
class TestWords:
    """Title of a line of evidence, and the question that it answers."""

    __test__ = False  # no test case, whatever its name

    title: str
    question: str


@dataclass(frozen=True)
class Quantity:
    """A number of a finding in a sentence: "{name} rose from {a} to {b}{unit}".

    ``scale`` is what the number is multiplied with before it is shown.
    """

    name: str
    unit: str = ""
    scale: float = 1.0


TESTS: Mapping[str, TestWords] = {
    "activity_gain": TestWords(
        "Gain under each noise model", "Is the orbit needed whatever the noise model?"
    ),
    "alias": TestWords(
        "Alias or true period",
        "Is the period itself preferred over its daily, monthly and yearly aliases?",
    ),
    "correlation": TestWords(
        "Correlation with indicators",
        "Do the velocities follow an indicator, and less so once the signal is removed?",
    ),
    "cycle": TestWords(
        "Activity cycle", "Does the signal follow the long-term activity cycle in phase?"
    ),
    "dominance": TestWords(
        "Lead over other periods",
        "Does the period stand out against all others once activity is modelled?",
    ),
    "family": TestWords(
        "Family of the rotation",
        "Does the signal belong to a set of rotation, its harmonics and their yearly aliases?",
    ),
    "harmonics": TestWords(
        "Harmonic or eccentricity",
        "Is the period a harmonic of another signal, or the eccentricity a signal in disguise?",
    ),
    "indicator_power": TestWords(
        "Indicators at the period",
        "Do the indicators vary at this period, and would they if the star made the signal?",
    ),
    "joint_amplitude": TestWords(
        "Amplitude under the activity model",
        "Does the orbit survive when the star's activity is modelled along with it?",
    ),
    "line_shape": TestWords(
        "Line shape",
        "Does the bisector change with the velocity at this period, and with what sign?",
    ),
    "neighbours": TestWords(
        "Neighbouring periods", "Does the signal stand alone, or in a crowd of nearby periods?"
    ),
    "own_null": TestWords(
        "The star's own null",
        "How often does this star, without the planet, give a signal as convincing?",
    ),
    "persistence": TestWords(
        "Persistence over the years", "Does the signal keep its amplitude and phase over the years?"
    ),
    "plausible_amplitude": TestWords(
        "Plausible amplitude", "Could this star's activity produce an amplitude like this?"
    ),
    "prediction": TestWords(
        "Prediction of unseen velocities", "Does the orbit predict velocities it has not seen?"
    ),
    "rotation": TestWords(
        "Rotation period", "Is the period the star's rotation, a harmonic, or an alias of one?"
    ),
    "sampling": TestWords(
        "Sampling", "Do the measurements cover the period well enough to judge the signal?"
    ),
    "stability": TestWords("Orbital stability", "Can the planets of this solution live together?"),
    "wavelength": TestWords(
        "Dependence on wavelength", "Is the amplitude the same at all wavelengths?"
    ),
}

_GAIN = "the gain in log-likelihood"
QUANTITIES: Mapping[str, Quantity] = {
    "activity_gain.statistic": Quantity(f"{_GAIN} under the least favourable noise model"),
    "activity_gain.gain_joint": Quantity(f"{_GAIN} under the joint model of all series"),
    "activity_gain.gain_white": Quantity(f"{_GAIN} over white noise"),
    "activity_gain.gain_decorrelated": Quantity(f"{_GAIN} with the indicators as linear terms"),
    "activity_gain.gain_velocity": Quantity(f"{_GAIN} under a process of the velocities alone"),
    "correlation.statistic": Quantity(
        "the drop in the correlation with an indicator, once the signal is removed,"
    ),
    "correlation.pearson_with_all_signals": Quantity(
        "the correlation of velocities without any signal with an indicator"
    ),
    "line_shape.statistic": Quantity("the slope of bisector against velocity at this period"),
    "dominance.statistic": Quantity("the lead in log-likelihood over the best other period"),
    "indicator_power.statistic": Quantity(
        "the log-odds that the indicators vary at this period as they would with the star"
    ),
    "joint_amplitude.statistic": Quantity(
        "the amplitude under the activity model", " times its error"
    ),
    "joint_amplitude.kept_share": Quantity(
        "the share of the amplitude that the activity model leaves", " %", 100.0
    ),
    "joint_amplitude.log_bayes": Quantity(
        "the ln Bayes factor of the orbit on top of activity against activity alone"
    ),
    "persistence.p_value": Quantity("the p-value of a constant amplitude and phase"),
    "plausible_amplitude.statistic": Quantity(
        "ln of the amplitude over what activity of this star would typically give"
    ),
    "prediction.statistic": Quantity(
        "the log score of the orbit on velocities that were left out of the fit"
    ),
    "rotation.statistic": Quantity(
        "the log-odds that the period is the rotation, a harmonic or an alias of one"
    ),
}
