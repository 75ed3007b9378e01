"""What every figure means, in a sentence or two, for whoever reads a report."""

OPENING = (
    "The least clear height of all eyes at the best instant, in per cent of the spacing of neighbouring levels, with one trace in a "
    "thousand of each level left outside: 100 is perfect, 0 and below is closed. Where a level was seen less than ten thousand times, "
    "its tail comes from the pattern response and the noise, not from the extremes of few traces."
)

# by the label of `monitor.views.wording.figure_groups`; a label that begins with … belongs to the line before it
DEFINITIONS = {
    "Width": "For how long about the best instant the opening is above 0; the narrowest eye, at most 1 UI (symbol period).",
    "Noise margin": "Half the opening over the rms noise.",
    "Opening at target rate": "The opening with the noise's tails taken out to the target error rate: what is left for bad luck.",
    "Closure": "20 log10(100 / opening).",
    "Level thickness": "Standard deviation of the levels' traces at the best instant, of the level spacing.",
    "Level linearity": "How evenly the levels are spaced: 1 is even. Four levels: R_LM of IEEE 802.3, Annex 120D.",
    "Best instant": "Where the eye is widest open, against the instant at which the timing loop decides.",
    "1 dB worse at": "How much earlier or later one may decide before the noise margin has fallen by 1 dB.",
    "Timing slope": "How fast the opening closes as the sampling instant moves, on the steeper side.",
    "Equalised": "Opening of the second half of these symbols behind a linear equaliser fitted on the first half, least squares.",
    "Spread": "rms spread of the times at which traces between mirror-image levels cross the middle threshold.",
    "Peak to peak": "The same between its 0.1 % and 99.9 % quantiles.",
    "Pattern part": "Spread of the mean crossing times of different neighbouring symbols: what the data itself does.",
    "Random part": "rms spread that is left when each pattern's own mean is taken out.",
    "Duty-cycle distortion": "Mean time of falling crossings less that of rising ones.",
    "Rise 20 to 80 %": "From 20 to 80 % of the mean full transition; two levels only.",
    "Periodic jitter": "Peak and frequency of a line that stands clear of the floor in the timing error's spectrum.",
    "SNR": "Mean symbol energy over noise variance behind the matched filter (for I/Q: Es/N0); what neighbouring symbols do is no noise.",
    "MER": "Modulation error ratio: mean power of the ideal points over that of the deviation from them, after least-squares gain.",
    "EVM": "Error vector magnitude: 100 · 10^(−MER/20), of the rms constellation.",
    "Q": "Distance of two neighbouring levels over the sum of their standard deviations, the worst eye.",
    "Bit error rate": "Semi-analytic: for the patterns of neighbouring symbols the distance to the thresholds, the Gaussian tail beyond "
    "it, averaged over symbols and bits (Gray coding). An estimate, not a count of errors.",
    "Clock offset": "The symbol rate as recovered against the one given or found.",
    "Clock jitter": "rms of the decision instants about a straight line: within the timing loop's bandwidth.",
    "Carrier": "Frequency of the carrier against the centre of the recording.",
    "Phase jitter": "rms of the carrier phase about a straight line: within the carrier loop's bandwidth.",
    "I/Q gain": "Gain of the Q rail over that of the I rail, I and Q as the carrier was recovered.",
    "I/Q skew": "How far Q is from a right angle to I.",
    "DC offset": "Offset of the levels' middle, of the rms constellation point.",
}

BEHIND = (
    (
        "What closes the eye",
        "Points of opening that each cause takes at the target error rate: the drop between the model's opening without and with the "
        "cause; random causes share a common drop in proportion to their variances. With the opening left at the target rate the parts "
        "add up to 100; what no cause explains is shown as such.",
    ),
    (
        "Response of the link",
        "Least squares over the window: how much of each neighbouring symbol is in the wave at the best instant, against the symbol "
        "that is decided there. Strength: rms over the rails.",
    ),
    (
        "Error rate over instant and threshold",
        "The semi-analytic error rate if one decided at another instant, or by another threshold of the worst eye; the bar is the "
        "stretch that keeps the target.",
    ),
    (
        "Deterministic and random jitter",
        "Dual-Dirac model of the crossings' tails: total jitter at an error rate = deterministic part + 2 Q⁻¹(rate) × random part.",
    ),
    (
        "What would open it",
        "Equalisers are fitted on the first half of the window and measured on the second, by the same eye figures. "
        "3 dB more signal: the model's opening with half the noise variance.",
    ),
    (
        "95 % interval",
        "From the scatter within the stretch that was measured; of 100 such intervals some 95 hold the true value. "
        "A figure without one has none that could be told.",
    ),
)


def definition_of(label: str) -> str:
    """The sentence for a figure's label; empty for a line that only goes on from the one before."""
    if label.startswith("…"):
        return ""
    return DEFINITIONS[label.partition(",")[0]]
