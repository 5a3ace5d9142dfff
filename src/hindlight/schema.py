"""Every column of every table that is written, and every fixed word in them: declared once here, read by all.

A `TableColumn` says a column's name, type, unit, UCD (IVOA UCD1+ list) and meaning. Nothing here reads or writes files.
"""

from __future__ import annotations

from dataclasses import dataclass
from enum import IntFlag

NATURAL_UNIT = "flux"  # stands for the unit of the channel, which differs from row to row


@dataclass(frozen=True)
class TableColumn:
    """One column: `dtype` is float64, int64, bool or str; text blanks are empty strings, missing numbers NaN."""

    name: str
    doc: str
    unit: str = ""
    ucd: str = ""
    dtype: str = "float64"


class Flag(IntFlag):
    """Bits of a measurement's `flags`."""

    EDGE = 1
    BLANKED = 2
    SATURATED = 4
    THIN_BACKGROUND = 8
    NEIGHBOUR = 16
    LOW_GAIN = 32
    EXTRAPOLATED = 64


FLAG_DOCS = {
    Flag.EDGE: "the pixels the estimator needs reach over the edge of the image: no flux",
    Flag.BLANKED: "a pixel the estimator needs is blank: no flux",
    Flag.SATURATED: "a pixel the estimator needs is at or above the saturation level: not used",
    Flag.THIN_BACKGROUND: "fewer than half of the annulus pixels are there; no flux when fewer than 20 are",
    Flag.NEIGHBOUR: "a source brighter than the position itself stands within the inner radius of the annulus",
    Flag.LOW_GAIN: "the primary beam's gain is below the floor or unknown there: no flux",
    Flag.EXTRAPOLATED: "brighter than the brightest comparison of its plate: the flux is extrapolated",
}
UNUSABLE = Flag.EDGE | Flag.BLANKED | Flag.SATURATED | Flag.LOW_GAIN

REASONS = {
    "empty_file": "the file has no bytes",
    "not_fits": "the file does not begin as FITS does",
    "unreadable": "the operating system would not let the file be read",
    "bad_header": "the header cannot be parsed or has no END",
    "truncated": "the file ends before its data do",
    "bad_compression": "the compressed file is broken or unpacks to more than the limit",
    "checksum": "a checksum in the header is not that of the bytes: damaged, or changed since without a new checksum",
    "no_image": "no HDU of the file holds an image",
    "no_wcs": "the image has no celestial coordinates",
    "bad_wcs": "the celestial coordinates are unusable",
    "too_many_planes": "the cube has more planes than the limit in the settings",
    "unknown_axis": "an axis longer than one is neither celestial nor time, frequency or Stokes",
    "no_dialect": "no dialect recognises the header",
    "bad_pixels": "the pixels could not be read when the frame was measured",
    "not_measured": "an estimator plugin failed on the frame",
    "companion": "the file belongs to an image, by the patterns in [companions], and is no frame itself",
    "bad_companion": "a file that belongs to the image does not fit it",
    "vanished": "the file was there when the run began and is gone",
    "changed": "the file has changed since it was read or measured",
    "duplicate_of": "the same exposure as another frame, which is kept: it counts once",
}

ASSUMPTIONS = {
    "geocentre": "no site in the header or settings: the Earth's centre was used, times are uncertain by 21 ms",
    "no_clock": "no time of day that can be trusted: fluxes are measured, timing is refused",
    "axis_zero_assumed": "the time axis has no reference (MJDREF, DATEREF): DATE-OBS is taken for its zero, each coordinate "
    "for the middle of its plane",
    "axis_time_unknown": "planes of a time axis without CRVAL, CDELT or unit, or without a reference (MJDREF, DATEREF) and a "
    "start (DATE-OBS) that could be its zero",
    "implausible_date": "a date before 1850 or after 2100, or an end before its start: that date was not used",
    "implausible_exposure": "an exposure above 100 days, or negative: it was taken as unknown",
    "repeated_keyword": "a keyword stands more than once with different values: the first one was taken",
    "no_exposure": "no exposure time: the stated time was taken for its middle",
    "start_assumed": "the header does not say what its date refers to: taken as the start of the exposure",
    "scale_assumed": "no time scale in the header: UTC was taken",
    "frame_assumed": "no celestial frame in the header: taken from the equinox, or ICRS where there is none",
    "no_beam": "no beam or seeing in the header: the width of the comparison sources was used, or an assumed one",
    "beam_from_settings": "no beam or seeing in the header: the width in the settings was used",
    "no_unit": "no unit in the header: fluxes are in the image's own numbers",
    "no_frequency": "a radio image without a frequency",
    "no_instrument": "no instrument in the header",
    "stokes_assumed": "no Stokes parameter in the header: taken as I",
    "primary_beam_unknown": "the header does not say whether the primary beam was corrected: fluxes are apparent",
    "plane_exposure": "the exposure of a time plane was taken as the step of the time axis",
    "span_is_good_time": "no good time in the header: the span from start to end was taken",
    "night_date": "the date is that of the night: MJD, sidereal time or longitude says that the time is of the day after",
    "night_unsettled": "the date is that of the night and nothing says whether the time is of the day after",
    "dates_disagree": "the date and MJD (or JD) are more than half a day apart: neither time was trusted",
    "date_form": "day and month of the date could be the other way round: the first was taken as the day",
    "century_assumed": "a year of two digits, 00 to 29, was read as 19YY: where 20YY was meant, clock_offset_s = 3155760000.0 "
    "in a [[frames]] block",
    "clock_unit_assumed": "the time of day is a bare number: up to 24 it was taken as hours, above as seconds",
    "local_time": "the time of day is local: the offset from UTC in the header was applied",
    "local_unsettled": "the time of day is local and its offset from UTC, or the sign of that, is not stated",
    "sidereal_time": "the time of day was computed from sidereal time and longitude: good to a second or two",
    "site_unsettled": "the header's longitude does not say whether east or west is positive: it was not used",
    "exposure_doubtful": "the exposure is below 0.01 s or above 100 000 s, perhaps in another unit: taken as stated",
    "coadds": "several exposures were combined: the stated exposure may be that of each one, but was taken as that of all",
    "intermittent": "the good time is less than the span from start to end: when it lay in between is not known",
    "beam_from_history": "the beam was taken from the text of the header's history or comments",
    "beam_swapped": "the minor axis of the beam was larger than the major one: they were swapped",
    "beam_angle_assumed": "the beam is not round and its angle is not stated: a circle of the same area was used",
    "beam_unit": "the stated beam cannot be in degrees, but can in arcsec: used only where the settings say so",
    "rotation_doubtful": "the first axis has a rotation of its own: only that of the second was used, by the standard",
    "primary_header": "times and instrument were taken from the primary header, which the extension may not have meant",
    "primary_beam_apparent": "the primary beam is uncorrected and its width not known: fluxes are apparent",
    "photographic_assumed": "the header names a plate but no emulsion: the response was taken as photographic",
    "gains_not_applied": "the primary beam is corrected already: the companion with its gains is not applied",
    "set_by_user": "these facts come from [[frames]] blocks of the settings",
    "set_without_effect": "facts that [[frames]] blocks give but this header leaves no place for",
    "unverified": "the header has checksums that were not verified: see verify_checksums under [inventory]",
}

VERDICTS = {
    "uncalibrated": "too few comparisons: fluxes are raw, their errors widened",
    "good": "tied to comparisons",
    "bad": "comparisons scatter so much that the frame is not used",
    "seen_only": "a photographic frame with too few comparisons for a response curve: it tells only seen or unseen",
}

STANDINGS = {
    "periodic": "varies beyond chance and repeats with a period that survives aliases, harmonics and the aperiodic null",
    "repeating": "bright in two or more separate epochs or pulses beyond chance, no period established",
    "single": "bright once beyond chance, quiet otherwise",
    "variable": "varies beyond chance, not in separate brightenings, or in several frames whose times are not known",
    "steady": "seen, does not vary beyond chance, and enough frames to say so",
    "unseen": "enough frames, never seen, not even in the mean",
    "undecided": "too few usable frames, or too few controls, to say",
    "uncovered": "no usable frame",
}

FRAMES = (
    TableColumn("id", "identifier of the frame in this run", dtype="int64", ucd="meta.id"),
    TableColumn("archive", "the archive folder as given", dtype="str"),
    TableColumn("path", "file, relative to the archive folder", dtype="str", ucd="meta.id;meta.file"),
    TableColumn("hdu", "HDU within the file, 0 is the primary", dtype="int64"),
    TableColumn("plane", "plane of a cube, counted over its longer axes in storage order, 0-based", dtype="int64"),
    TableColumn("digest", "of the header's bytes and the file's size", dtype="str"),
    TableColumn("size", "bytes of the file", unit="byte", dtype="int64"),
    TableColumn("modified_ns", "modification time of the file when it was read", unit="ns", dtype="int64"),
    TableColumn("batch", "piece of work the frame belongs to, -1 for none", dtype="int64"),
    TableColumn("channel", "key of comparable fluxes", dtype="str"),
    TableColumn("instrument", "instrument", dtype="str", ucd="meta.id;instr"),
    TableColumn("band", "filter or band", dtype="str", ucd="instr.bandpass"),
    TableColumn("stokes", "Stokes parameter", dtype="str", ucd="phys.polarization.stokes"),
    TableColumn("frequency_hz", "frequency, NaN where not stated", unit="Hz", ucd="em.freq"),
    TableColumn("start_mjd_tdb", "first photon, MJD (TDB) at the site, NaN where unknown", unit="d", ucd="time.start"),
    TableColumn(
        "middle_mjd_tdb",
        "middle of the good time, MJD (TDB) at the site; noon of the day where only that is known",
        unit="d",
        ucd="time.epoch",
    ),
    TableColumn("end_mjd_tdb", "last photon, MJD (TDB) at the site", unit="d", ucd="time.end"),
    TableColumn("middle_tdb_s", "middle of the good time, seconds from J2000.0 TDB at the site", unit="s"),
    TableColumn("middle_utc", "middle of the good time, ISO 8601 UTC", dtype="str"),
    TableColumn("exposure_s", "good time, NaN where unknown", unit="s", ucd="time.duration;obs.exposure"),
    TableColumn("span_s", "from first to last photon, NaN where unknown", unit="s", ucd="time.duration"),
    TableColumn("barycentric", "whether the header's times are already barycentric", dtype="bool"),
    TableColumn("site_x", "place of the instrument (ITRF), NaN for the geocentre", unit="m"),
    TableColumn("site_y", "place of the instrument (ITRF), NaN for the geocentre", unit="m"),
    TableColumn("site_z", "place of the instrument (ITRF), NaN for the geocentre", unit="m"),
    TableColumn("beam_major", "FWHM of the beam or seeing", unit="arcsec", ucd="pos.angResolution"),
    TableColumn("beam_minor", "FWHM of the beam or seeing, minor axis", unit="arcsec", ucd="pos.angResolution"),
    TableColumn("beam_angle", "position angle of the beam, east of north", unit="deg", ucd="pos.posAng"),
    TableColumn("unit", "unit of the pixels", dtype="str", ucd="meta.unit"),
    TableColumn("depth", "noise per pixel as the header states it, in the pixels' unit, NaN where not stated"),
    TableColumn("saturation", "saturation level in the pixels' unit, NaN where not stated"),
    TableColumn("electrons_per_unit", "gain of the detector, electrons per unit of the pixels, NaN where not stated"),
    TableColumn("width", "pixels along the first celestial axis", unit="pixel", dtype="int64"),
    TableColumn("height", "pixels along the second celestial axis", unit="pixel", dtype="int64"),
    TableColumn("pixel_scale", "square root of the area of a pixel", unit="arcsec", ucd="instr.scale"),
    TableColumn("centre_ra", "centre of the footprint, ICRS", unit="deg", ucd="pos.eq.ra"),
    TableColumn("centre_dec", "centre of the footprint, ICRS", unit="deg", ucd="pos.eq.dec"),
    TableColumn("radius", "from the centre to the farthest corner", unit="deg", ucd="phys.angSize"),
    TableColumn(
        "footprint",
        "corners and, between them, middles of the sides, ICRS degrees: ra dec ra dec ...; empty where the image is wider "
        "than 160 degrees or reaches beyond the sky",
        dtype="str",
        ucd="pos.outline",
    ),
    TableColumn("primary_beam", "corrected, uncorrected or unknown", dtype="str"),
    TableColumn(
        "primary_beam_fwhm_deg", "FWHM of a Gaussian primary beam about the reference pixel, NaN for none", unit="deg"
    ),
    TableColumn("response", "of the detector: linear, or photographic", dtype="str"),
    TableColumn(
        "negative", "whether stars are darker than the sky: pixels are taken with the other sign", dtype="bool"
    ),
    TableColumn("clock_error_s", "1-sigma error of the header's clock, NaN where not stated", unit="s"),
    TableColumn(
        "weight_file", "companion with weights, relative to the archive folder", dtype="str", ucd="meta.id;meta.file"
    ),
    TableColumn(
        "rms_file", "companion with the noise, relative to the archive folder", dtype="str", ucd="meta.id;meta.file"
    ),
    TableColumn(
        "mask_file", "companion with bad pixels, relative to the archive folder", dtype="str", ucd="meta.id;meta.file"
    ),
    TableColumn(
        "primary_beam_file",
        "companion with gains, relative to the archive folder",
        dtype="str",
        ucd="meta.id;meta.file",
    ),
    TableColumn(
        "good_time_file",
        "companion with a table of good time, relative to the archive folder",
        dtype="str",
        ucd="meta.id;meta.file",
    ),
    TableColumn("dialect", "plugin that read the header", dtype="str"),
    TableColumn("state", "current, vanished (kept) or void (the file has changed since)", dtype="str"),
    TableColumn("duplicate_of", "id of the frame kept of the same exposure, -1 for none", dtype="int64"),
    TableColumn("related_to", "id of the deep image that holds this exposure, -1 for none", dtype="int64"),
    TableColumn("assumptions", "each thing taken for granted: word and sentence", dtype="str", ucd="meta.note"),
)

POSITIONS = (
    TableColumn("id", "identifier of the position in this run", dtype="int64", ucd="meta.id"),
    TableColumn("name", "name of the target, empty for a control", dtype="str", ucd="meta.id;src"),
    TableColumn(
        "kind",
        "target, trial (a place within a target's error), control, blank (a place tried for a control) or comparison",
        dtype="str",
        ucd="meta.code.class",
    ),
    TableColumn("ra", "right ascension, ICRS", unit="deg", ucd="pos.eq.ra"),
    TableColumn("dec", "declination, ICRS", unit="deg", ucd="pos.eq.dec"),
    TableColumn("pm_ra_cosdec", "proper motion", unit="mas/yr", ucd="pos.pm;pos.eq.ra"),
    TableColumn("pm_dec", "proper motion", unit="mas/yr", ucd="pos.pm;pos.eq.dec"),
    TableColumn("ref_epoch", "Julian year of the position", unit="yr", ucd="meta.ref;time.epoch"),
    TableColumn("field", "cell of sky, by its number, whose controls serve", dtype="int64"),
    TableColumn("round", "round of measuring the position belongs to", dtype="int64"),
    TableColumn(
        "clear_radius", "for a control: no target it serves is nearer than this", unit="deg", ucd="phys.angSize"
    ),
    TableColumn(
        "search", "where places are searched: the id of the first target searched with the same controls", dtype="int64"
    ),
    TableColumn("parent", "where places are searched: the id of that in the middle, -1 elsewhere", dtype="int64"),
    TableColumn("place_err", "1-sigma error per axis of a place tried, from the distance to the next", unit="arcsec"),
    TableColumn("node", "place on the lattice around it, the same number for the same offset; else -1", dtype="int64"),
    TableColumn(
        "added_for",
        "for a control of a second pass: a target that lay beyond all controls before; else -1",
        dtype="int64",
    ),
)

FRAME_SOLUTION = (
    TableColumn("frame", "identifier of the frame", dtype="int64", ucd="meta.id"),
    TableColumn("channel", "key of comparable fluxes", dtype="str"),
    TableColumn("gain", "calibrated flux = flux / gain; NaN where the frame gives no flux on the channel's scale"),
    TableColumn("gain_err", "1-sigma error of the gain"),
    TableColumn("shift_x", "shift at the middle of the image against its header, NaN where unknown", unit="pixel"),
    TableColumn("shift_y", "shift at the middle of the image against its header, NaN where unknown", unit="pixel"),
    TableColumn("fwhm", "width of beam or seeing that was used, NaN where nothing was measured", unit="pixel"),
    TableColumn(
        "held", "fraction of a point source's light that was counted, contained in gain: median of the channel"
    ),
    TableColumn("error_scale", "factor on the error"),
    TableColumn("extra_scatter", "further scatter, as a fraction of the flux"),
    TableColumn("n_comparisons", "comparison sources used", dtype="int64"),
    TableColumn("loss_off_axis", "fraction of the flux lost for each square degree from the centre", unit="deg**-2"),
    TableColumn("loss_off_axis_err", "its 1-sigma error, NaN where the comparisons cannot tell", unit="deg**-2"),
    TableColumn("loss_noise", "flux lost by sources that are seen, in units of their noise, as by CLEAN"),
    TableColumn("loss_noise_err", "its 1-sigma error, NaN where the comparisons cannot tell"),
    TableColumn("centre_x", "middle of the image, from which distances are counted", unit="pixel"),
    TableColumn("centre_y", "middle of the image, from which distances are counted", unit="pixel"),
    TableColumn("pixel_deg", "side of a pixel", unit="deg", ucd="instr.scale"),
    TableColumn("verdict", ", ".join(VERDICTS), dtype="str"),
    TableColumn(
        "curve",
        "of a photographic frame, in place of the gain: measured flux, flux and the curve's error as a fraction of the "
        "flux, again and again; straight in logarithms between, a line through the origin below, empty for none",
        dtype="str",
    ),
    TableColumn(
        "seen_limit", "of a photographic frame: the flux of the faintest comparison seen in it, NaN where none is known"
    ),
)

MEASUREMENTS = (
    TableColumn("position", "identifier of the position", dtype="int64"),
    TableColumn("frame", "identifier of the frame", dtype="int64"),
    TableColumn("channel", "key of comparable fluxes", dtype="str"),
    TableColumn("x", "0-based pixel, first axis", unit="pixel", ucd="pos.cartesian.x;instr.det"),
    TableColumn("y", "0-based pixel, second axis", unit="pixel", ucd="pos.cartesian.y;instr.det"),
    TableColumn(
        "t_tdb_s", "middle of good time, seconds from J2000.0 TDB at the barycentre", unit="s", ucd="time.epoch"
    ),
    TableColumn("bjd_tdb", "the same as BJD (TDB); exact to 40 microseconds", unit="d", ucd="time.epoch"),
    TableColumn("exposure_s", "good time, NaN where unknown", unit="s", ucd="time.duration;obs.exposure"),
    TableColumn("flux", "raw flux in the channel's unit", unit=NATURAL_UNIT, ucd="phot.flux"),
    TableColumn("flux_err", "its 1-sigma error", unit=NATURAL_UNIT, ucd="stat.error;phot.flux"),
    TableColumn(
        "background", "local background per pixel that was taken off", unit=NATURAL_UNIT, ucd="instr.background"
    ),
    TableColumn(
        "rms",
        "noise per pixel: robust, of the annulus, or of the rms companion",
        unit=NATURAL_UNIT,
        ucd="instr.det.noise",
    ),
    TableColumn("gain", "primary-beam gain used, 1 where none was applied"),
    TableColumn("flags", "bits, see the README", dtype="int64", ucd="meta.code.qual"),
    TableColumn("shift_x", "shift of the frame at its middle, contained in x; NaN where none was found", unit="pixel"),
    TableColumn("shift_y", "shift of the frame at its middle, contained in y; NaN where none was found", unit="pixel"),
    TableColumn("fwhm", "width of beam or seeing that was used (mean of both axes)", unit="pixel"),
    TableColumn(
        "held", "fraction of a point source's light that sums of pixels count, from comparisons; NaN where unknown"
    ),
)

LIGHT_CURVE = (
    TableColumn("channel", "key of comparable fluxes", dtype="str"),
    TableColumn(
        "t_tdb_s", "middle of good time, seconds from J2000.0 TDB at the barycentre", unit="s", ucd="time.epoch"
    ),
    TableColumn("bjd_tdb", "the same as BJD (TDB)", unit="d", ucd="time.epoch"),
    TableColumn(
        "middle_utc", "middle of good time at the site, ISO 8601 UTC", dtype="str", ucd="time.epoch;obs.exposure"
    ),
    TableColumn(
        "clock_error_s", "1-sigma error of the frame's clock, NaN where not stated", unit="s", ucd="stat.error;time"
    ),
    TableColumn("exposure_s", "good time, NaN where unknown", unit="s", ucd="time.duration;obs.exposure"),
    TableColumn(
        "flux",
        "flux on the channel's scale (see verdict), NaN where there is none or a frame tells only whether a source is seen",
        ucd="phot.flux",
    ),
    TableColumn("flux_err", "its 1-sigma error", ucd="stat.error;phot.flux"),
    TableColumn("flux_unit", "unit of the fluxes and of background and rms", dtype="str", ucd="meta.unit"),
    TableColumn("raw_flux", "flux before the frame's gain", ucd="phot.flux"),
    TableColumn("raw_flux_err", "its 1-sigma error", ucd="stat.error;phot.flux"),
    TableColumn(
        "verdict",
        "of the frame: good (on the flux scale of the comparisons), uncalibrated (flux is raw, its error widened), bad (not "
        "used) or seen_only",
        dtype="str",
    ),
    TableColumn("background", "local background per pixel that was taken off", ucd="instr.background"),
    TableColumn("rms", "robust local noise per pixel", ucd="instr.det.noise"),
    TableColumn("detected", "whether the measurement is above the channel's threshold", dtype="bool"),
    TableColumn(
        "limit_sigma",
        "threshold times error: a source this bright is detected in half of such frames; where a photographic frame gives "
        "no flux, that of the faintest comparison seen in it",
        ucd="phot.flux;stat.max",
    ),
    TableColumn(
        "limit_bayes",
        "95 % upper bound on the total flux in this frame (flat prior, flux not negative); NaN where signed",
        ucd="phot.flux;stat.max",
    ),
    TableColumn(
        "limit_above_quiet",
        "the like of limit_sigma for the excess over the quiet level, whose own error it holds",
        ucd="phot.flux;stat.max",
    ),
    TableColumn("deep", "whether it is in a deep image made of other frames here, which is not judged", dtype="bool"),
    TableColumn("x", "0-based pixel, first axis", unit="pixel", ucd="pos.cartesian.x;instr.det"),
    TableColumn("y", "0-based pixel, second axis", unit="pixel", ucd="pos.cartesian.y;instr.det"),
    TableColumn("flags", "bits, see the README", dtype="int64", ucd="meta.code.qual"),
    TableColumn("frame", "identifier of the frame", dtype="int64", ucd="meta.id"),
    TableColumn(
        "path", "file, relative to the archive folder, with HDU and plane", dtype="str", ucd="meta.id;meta.file"
    ),
)

REJECTS = (
    TableColumn("path", "file, relative to the archive folder", dtype="str", ucd="meta.id;meta.file"),
    TableColumn("hdu", "HDU, -1 for the whole file", dtype="int64"),
    TableColumn("plane", "plane of a cube, -1 for the whole HDU", dtype="int64"),
    TableColumn("reason", "a fixed word", dtype="str", ucd="meta.code.status"),
    TableColumn("detail", "a sentence", dtype="str", ucd="meta.note"),
    TableColumn("archive", "the archive folder", dtype="str"),
)

PLUGIN_FAULTS = (
    TableColumn("plugin", "name of the plugin", dtype="str", ucd="meta.id"),
    TableColumn("kind", "kind of plugin", dtype="str"),
    TableColumn("target", "first position at which it failed", dtype="str", ucd="meta.id;src"),
    TableColumn("channel", "channel of that light curve", dtype="str"),
    TableColumn("fault", "what went wrong: an exception's name, or wrong_column", dtype="str"),
    TableColumn("detail", "its message", dtype="str", ucd="meta.note"),
    TableColumn("line", "file and line of the plugin that raised it", dtype="str"),
    TableColumn("count", "how many light curves failed so", dtype="int64", ucd="meta.number"),
)

CHANNELS = (
    TableColumn("name", "target", dtype="str", ucd="meta.id;src"),
    TableColumn("channel", "key of comparable fluxes", dtype="str"),
    TableColumn("flux_unit", "unit of every flux in this row", dtype="str", ucd="meta.unit"),
    TableColumn("n_frames", "frames that cover the target", dtype="int64", ucd="meta.number;obs"),
    TableColumn("n_used", "frames with a usable flux", dtype="int64", ucd="meta.number;obs"),
    TableColumn("n_detected", "frames above the threshold", dtype="int64", ucd="meta.number;obs"),
    TableColumn(
        "n_calibrated", "usable frames whose flux scale is tied to comparisons", dtype="int64", ucd="meta.number;obs"
    ),
    TableColumn("threshold", "what counts as detected; the table says the false-alarm rate", ucd="stat.snr"),
    TableColumn("threshold_above_quiet", "the same for the excess over the quiet level", ucd="stat.snr"),
    TableColumn("threshold_mean", "the same for the mean flux over its error", ucd="stat.snr"),
    TableColumn("n_controls", "blank positions that set the thresholds", dtype="int64", ucd="meta.number"),
    TableColumn(
        "quiet_level",
        "flux when not bright; from the deep images without a bright frame where those are more precise",
        ucd="phot.flux",
    ),
    TableColumn("quiet_level_err", "its 1-sigma error", ucd="stat.error;phot.flux"),
    TableColumn("flux_mean", "weighted mean flux over all usable frames, seen or not", ucd="phot.flux;stat.mean"),
    TableColumn("flux_mean_err", "its 1-sigma error", ucd="stat.error;phot.flux"),
    TableColumn("scatter", "scatter beyond the errors, maximum likelihood", ucd="stat.stdev;phot.flux"),
    TableColumn(
        "confusion_rms",
        "scatter of blank positions' mean fluxes beyond their errors: faint sources and diffuse emission",
        ucd="stat.stdev;phot.flux",
    ),
    TableColumn(
        "blank_level",
        "median mean flux of blank positions where that is below zero beyond chance (background too high), else 0",
        ucd="phot.flux",
    ),
    TableColumn(
        "limit_sigma",
        "k-sigma limit of a median frame, above blank_level: a source this bright is detected in half of them",
        ucd="phot.flux;stat.max",
    ),
    TableColumn(
        "limit_bayes",
        "95 % upper bound on the mean total flux above blank_level (flat prior, flux not negative); its error holds "
        "confusion_rms",
        ucd="phot.flux;stat.max",
    ),
    TableColumn(
        "limit_above_quiet",
        "k-sigma limit of a median frame on the excess over the quiet level",
        ucd="phot.flux;stat.max",
    ),
    TableColumn(
        "n_deep",
        "deep images made of frames counted here: their noise is not independent of those, so no other count has them",
        dtype="int64",
        ucd="meta.number;obs",
    ),
    TableColumn("deep_flux", "weighted mean flux in the deep images", ucd="phot.flux;stat.mean"),
    TableColumn("deep_flux_err", "its 1-sigma error", ucd="stat.error;phot.flux"),
    TableColumn(
        "n_seen_only",
        "photographic frames with too few comparisons for fluxes: only n_frames counts them",
        dtype="int64",
        ucd="meta.number;obs",
    ),
    TableColumn("n_seen", "of these, frames in which the target is seen", dtype="int64", ucd="meta.number;obs"),
    TableColumn("seen_limit", "flux of the faintest comparison seen in these, their median", ucd="phot.flux;stat.max"),
)

CANDIDATES = (
    TableColumn("name", "target", dtype="str", ucd="meta.id;meta.main"),
    TableColumn("ra", "right ascension, ICRS", unit="deg", ucd="pos.eq.ra;meta.main"),
    TableColumn("dec", "declination, ICRS", unit="deg", ucd="pos.eq.dec;meta.main"),
    TableColumn("standing", "the verdict in one word", dtype="str", ucd="meta.code.class"),
    TableColumn("concerns", "consistency checks that failed", dtype="str", ucd="meta.code.qual"),
    TableColumn(
        "p_value", "chance that a blank position of this field looks as variable as this", ucd="stat.probability"
    ),
    TableColumn("q_value", "false-discovery rate over the targets of the run at this p-value", ucd="stat.probability"),
    TableColumn("p_is_extrapolated", "whether p_value lies beyond the controls, from a fitted tail", dtype="bool"),
    TableColumn("lowest_p_statistic", "the statistic and channel that is furthest out", dtype="str", ucd="meta.id"),
    TableColumn("n_frames", "frames that cover the target, all channels", dtype="int64", ucd="meta.number;obs"),
    TableColumn("n_used", "frames with a usable flux", dtype="int64", ucd="meta.number;obs"),
    TableColumn("n_detected", "frames above their channel's threshold", dtype="int64", ucd="meta.number;obs"),
    TableColumn("n_epochs", "separate looks among the usable frames", dtype="int64", ucd="meta.number;obs"),
    TableColumn("first_detected", "middle of the first frame with a detection, ISO 8601 UTC", dtype="str"),
    TableColumn("last_detected", "middle of the last frame with a detection, ISO 8601 UTC", dtype="str"),
    TableColumn(
        "quiet_before", "last constraining non-detection before the first detection, ISO 8601 UTC", dtype="str"
    ),
    TableColumn("quiet_after", "first constraining non-detection after the last detection, ISO 8601 UTC", dtype="str"),
    TableColumn("peak_snr", "highest flux over its error in a single frame", ucd="stat.snr;stat.max"),
    TableColumn("peak_frame", "the frame of that flux: file, HDU and plane", dtype="str", ucd="meta.id;meta.file"),
    TableColumn("period", "period, where one is established", unit="s", ucd="time.period"),
    TableColumn("period_err", "its 1-sigma error", unit="s", ucd="stat.error;time.period"),
    TableColumn("period_dot", "change of the period", unit="s/s", ucd="time.period;arith.diff"),
    TableColumn("period_dot_err", "its 1-sigma error", unit="s/s", ucd="stat.error;time.period"),
    TableColumn("epoch", "BJD (TDB) of a maximum near the weighted middle of the data", unit="d", ucd="time.epoch"),
    TableColumn("cycle_counts_left", "ephemerides still possible, 0 where no period is claimed", dtype="int64"),
    TableColumn(
        "lookback_p", "chance of the detections falling in the windows of the ephemeris given", ucd="stat.probability"
    ),
    TableColumn("n_controls", "blank positions that the target was ranked with", dtype="int64", ucd="meta.number"),
    TableColumn(
        "n_effective", "how many of them count: copies made for a bright target are alike in groups", ucd="meta.number"
    ),
    TableColumn("null", "what these controls are: blank sky, or blank sky made as bright as the target", dtype="str"),
    TableColumn("unlike", "largest factor between the typical error of the target and of one of its controls"),
    TableColumn(
        "p_empirical",
        "p_value before any extrapolation: (r + w) / (n + w) for r of n controls as far out, w of which count as one "
        "(n_controls / n_effective)",
        ucd="stat.probability",
    ),
    TableColumn(
        "tail_shape",
        "most likely shape (0 exponential, larger heavier) of the tail of its controls; NaN where none was fitted",
        ucd="stat.fit.param",
    ),
    TableColumn("tail_n", "controls that tail was fitted to; 0 for none", dtype="int64", ucd="meta.number"),
    TableColumn(
        "tail_fit_p",
        "chance that controls of such a tail are as unlike it; below 0.01 it is not used; NaN where none was fitted",
        ucd="stat.fit.goodness",
    ),
    TableColumn(
        "beyond_controls",
        "distance of the deciding value from the middle of the controls, in their MAD; beyond them only where p_empirical is "
        "at its floor",
        ucd="stat.value",
    ),
    TableColumn("notes", "what a reader should know before trusting the row", dtype="str", ucd="meta.note"),
    TableColumn(
        "found_ra", "where it was judged, if searched within its position error, ICRS", unit="deg", ucd="pos.eq.ra"
    ),
    TableColumn(
        "found_dec", "where it was judged, if searched within its position error, ICRS", unit="deg", ucd="pos.eq.dec"
    ),
    TableColumn("n_trials", "places searched; the controls were searched alike", dtype="int64", ucd="meta.number"),
)
