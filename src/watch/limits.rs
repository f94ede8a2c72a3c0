//! Every maximum of the engine, in one place, with a word on what happens when it is reached.

/// The most channels. A reading of a further channel is counted as refused (`too-many-channels`);
/// the known ones go on undisturbed.
pub const CHANNELS_MAX: usize = 10_000;

/// The longest unit, bytes. A longer one is a mistake in the settings.
pub const UNIT_BYTES_MAX: usize = 16;

/// The fewest points that a window may be set to hold: the residual battery was validated from here.
pub const WINDOW_POINTS_MIN: usize = 60;

/// The most points a window may be set to hold; when full, the oldest point leaves.
pub const WINDOW_POINTS_MAX: usize = 4096;

/// The most readings held back for ordering in one channel; when full, the oldest is let through
/// early, so that a reading still older counts as late.
pub const HELD_BACK_MAX: usize = 512;

/// The readings whose times are remembered to tell a duplicate from a late one; older ones are
/// counted as late instead.
pub const REMEMBERED_TIMES_MAX: usize = 64;

/// The fewest points to which a curve is fitted.
pub const POINTS_TO_FIT: usize = 20;

/// The fewest points at which residuals are examined.
pub const POINTS_TO_EXAMINE: usize = 60;

/// The fewest points after a break for the window to begin anew there (and a fifth of the window).
pub const POINTS_AFTER_BREAK: usize = 40;

/// Longest sentence of an alert, bytes; wording is bounded by construction, a test holds it so.
pub const SENTENCE_BYTES_MAX: usize = 600;

const _: () = assert!(POINTS_TO_FIT < POINTS_TO_EXAMINE);
const _: () = assert!(POINTS_TO_EXAMINE <= WINDOW_POINTS_MIN);
const _: () = assert!(WINDOW_POINTS_MIN < WINDOW_POINTS_MAX);
const _: () = assert!(POINTS_AFTER_BREAK >= POINTS_TO_FIT);
