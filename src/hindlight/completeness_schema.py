"""The columns of the tables that `hindlight completeness` writes, as `schema` has those of a run."""

from __future__ import annotations

from hindlight.schema import TableColumn

COMPLETENESS = (
    TableColumn("subset", "which frames: all, those of an instrument, or of an instrument and a decade", dtype="str"),
    TableColumn("instrument", "instrument, empty for all", dtype="str", ucd="meta.id;instr"),
    TableColumn("decade", "such as 1990s, empty for all", dtype="str"),
    TableColumn("n_frames", "frames of the subset", dtype="int64", ucd="meta.number;obs"),
    TableColumn("n_fields", "fields in which it has looked at targets", dtype="int64", ucd="meta.number"),
    TableColumn(
        "n_targets", "targets it has looked at, which sources stand for alike", dtype="int64", ucd="meta.number"
    ),
    TableColumn("n_hosts", "controls as often measured, where sources are hidden", dtype="int64", ucd="meta.number"),
    TableColumn("kind", "pulses, smooth, or nothing (no source: false alarms)", dtype="str", ucd="meta.code.class"),
    TableColumn("flux", "peak flux in median frame errors of each channel; the table says these", ucd="phot.flux"),
    TableColumn("period", "period, NaN for no source", unit="s", ucd="time.period"),
    TableColumn("duty_cycle", "how much of a period a pulse fills; NaN where there are none"),
    TableColumn("duration", "of a pulse; NaN where there are none", unit="s", ucd="time.duration"),
    TableColumn("window", "in which a pulse lies anywhere; NaN where there are none", unit="s", ucd="time.duration"),
    TableColumn("missing", "fraction of the pulses that are not there; NaN where there are none"),
    TableColumn("n_injected", "sources added", dtype="int64", ucd="meta.number"),
    TableColumn(
        "n_recovered",
        "sources that would have been candidates, as one more target of this run's list",
        dtype="int64",
        ucd="meta.number",
    ),
    TableColumn("completeness", "n_recovered / n_injected", ucd="stat.probability"),
    TableColumn("completeness_low", "lower end of its 95 % Jeffreys interval", ucd="stat.probability;stat.min"),
    TableColumn("completeness_high", "upper end of its 95 % Jeffreys interval", ucd="stat.probability;stat.max"),
    TableColumn("n_seen", "sources above the detection threshold in some frame", dtype="int64", ucd="meta.number"),
    TableColumn("n_extrapolated", "recovered by the upper bound of a fitted tail", dtype="int64", ucd="meta.number"),
    TableColumn("median_snr", "highest flux added to a frame over its error, median of the sources", ucd="stat.snr"),
    TableColumn(
        "median_lit", "frames in which more than the error was added, median of the sources", ucd="meta.number"
    ),
    TableColumn("median_used", "usable frames, median of the sources", ucd="meta.number;obs"),
    TableColumn(
        "median_peak",
        "highest flux over its error measured in a frame, with the noise, median of the sources",
        ucd="stat.snr",
    ),
    TableColumn(
        "median_detected", "frames above their channel's threshold, median of the sources", ucd="meta.number;obs"
    ),
    TableColumn(
        "lowest_p", "smallest p-value that the controls can give, median of the sources", ucd="stat.probability"
    ),
)

COMPLETENESS_TARGETS = (
    TableColumn("name", "target", dtype="str", ucd="meta.id;meta.main"),
    TableColumn("standing", "the run's verdict", dtype="str", ucd="meta.code.class"),
    TableColumn("n_used", "usable frames of unsigned channels", dtype="int64", ucd="meta.number;obs"),
    TableColumn(
        "n_looks", "independent looks: epochs, or cycles of a known ephemeris", dtype="int64", ucd="meta.number"
    ),
    TableColumn("by_cycles", "whether looks are cycles of a known ephemeris", dtype="bool"),
    TableColumn(
        "like_flux",
        "highest flux over its error in a frame, as measured; for a target with no detection its lowest detection threshold",
        ucd="stat.snr;stat.max",
    ),
    TableColumn(
        "found_probability",
        "chance that a source like this would have been found: made-up sources of like_kind, like_period, like_duty_cycle in "
        "like_frames frames of like_subset whose highest flux over its error, measured in a frame, is like_flux; linear in "
        "its logarithm between fluxes of the grid; NaN where none is like it (steady, or outside the grid)",
        ucd="stat.probability",
    ),
    TableColumn("found_low", "lower end of its 95 % Jeffreys interval", ucd="stat.probability;stat.min"),
    TableColumn("found_high", "upper end of its 95 % Jeffreys interval", ucd="stat.probability;stat.max"),
    TableColumn(
        "like_kind",
        "pulses for standing single and repeating, smooth for variable; else that of the two which is seen in the nearest "
        "share of its frames; empty for none",
        dtype="str",
        ucd="meta.code.class",
    ),
    TableColumn(
        "like_period",
        "period of these sources: of those seen in the nearest share of frames, the nearest to the target's if it has one",
        unit="s",
        ucd="time.period",
    ),
    TableColumn(
        "like_duty_cycle", "duty cycle of these sources, by the share of frames they are seen in; NaN if smooth"
    ),
    TableColumn("like_subset", "the frames they are judged in: most of the target's are among them", dtype="str"),
    TableColumn("like_frames", "usable frames of these sources, their median", ucd="meta.number;obs"),
    TableColumn("like_sources", "how many of them the chance rests on", dtype="int64", ucd="meta.number"),
    TableColumn(
        "lowest_duty_limit",
        "95 % limit on the share of looks throughout which a source is on that no look could miss; NaN where the looks are too "
        "few or it was seen",
        ucd="stat.value;stat.max",
    ),
    *(
        TableColumn(
            f"flux_limit_{word}",
            "flux, mean over an exposure, in median frame errors of each channel, from which a source that is on throughout "
            f"{duty} of the looks or more is excluded at 95 %; NaN for none",
            ucd="phot.flux;stat.max",
        )
        for word, duty in (("half", 0.5), ("tenth", 0.1), ("hundredth", 0.01))
    ),
)

COMPLETENESS_LIMITS = (
    TableColumn("name", "unseen target", dtype="str", ucd="meta.id;meta.main"),
    TableColumn("flux", "flux in median frame errors of each channel, mean over an exposure", ucd="phot.flux"),
    TableColumn(
        "looks_effective",
        "sum over the looks of the chance to see such a source, on throughout, in the best frame of the look",
        ucd="meta.number",
    ),
    TableColumn(
        "duty_limit",
        "95 % limit on the share of looks throughout which it is on; NaN where all looks together set none",
        ucd="stat.value;stat.max",
    ),
)

COMPLETENESS_CHANNELS = (
    TableColumn("name", "unseen target", dtype="str", ucd="meta.id;meta.main"),
    TableColumn("channel", "unsigned channel", dtype="str", ucd="meta.id"),
    TableColumn("flux_unit", "unit of the fluxes in this row", dtype="str", ucd="meta.unit"),
    TableColumn("n_used", "usable frames", dtype="int64", ucd="meta.number;obs"),
    TableColumn("n_looks", "epochs, or cycles of a known ephemeris, among them", dtype="int64", ucd="meta.number"),
    TableColumn(
        "exposure", "sum of the exposures that are known, NaN for none", unit="s", ucd="time.duration;obs.exposure"
    ),
    TableColumn("frame_error", "median error of the flux in a frame", ucd="stat.error;phot.flux"),
    *(
        TableColumn(
            f"flux_limit_{word}",
            f"flux, mean over an exposure, from which a source that is on throughout {duty} of the looks or more is excluded "
            "at 95 % by this channel alone; NaN for none",
            ucd="phot.flux;stat.max",
        )
        for word, duty in (("half", 0.5), ("tenth", 0.1), ("hundredth", 0.01))
    ),
    TableColumn(
        "flux",
        "flux, mean over an exposure, that a typical frame shows with a chance of 0.977: threshold + 2",
        ucd="phot.flux",
    ),
    TableColumn(
        "duty_limit",
        "95 % limit on the share of looks throughout which a source has this flux",
        ucd="stat.value;stat.max",
    ),
    TableColumn(
        "fluence",
        "of a pulse that gives this flux in a frame of median exposure; NaN where exposures are unknown",
        ucd="phot.fluence",
    ),
    TableColumn("fluence_unit", "its unit: counts stay counts, other fluxes are multiplied by seconds", dtype="str"),
    TableColumn(
        "rate_limit",
        "95 % limit on the rate of pulses of this fluence or more, each within one exposure, at random times; NaN for none",
        unit="1/d",
        ucd="stat.value;stat.max",
    ),
    TableColumn(
        "n_made",
        "frames, in all channels, of made-up pulse trains to which a flux from 2 sigma above the threshold to twice that was "
        "added",
        dtype="int64",
        ucd="meta.number",
    ),
    TableColumn("n_seen", "of which so many are above the threshold", dtype="int64", ucd="meta.number"),
    TableColumn("sentence", "what the looks without a detection say, in words", dtype="str", ucd="meta.note"),
)
