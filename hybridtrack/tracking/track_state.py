"""States of a track, the reasons for them and the sources of a position: names, and their fixed numbers."""

STATES = ("alive", "weak", "lost", "out_of_view")
ALIVE, WEAK, LOST, OUT_OF_VIEW = range(len(STATES))

REASONS = (
    "none",
    "started",
    "frame_disagrees",
    "frame_unmatched",
    "frame_blurred",
    "low_texture",
    "saturated",
    "events_lost",
    "flash",
    "left_picture",
    "uncertain",
    "no_frame",
    "duplicate",
)
(
    NONE,
    STARTED,
    FRAME_DISAGREES,
    FRAME_UNMATCHED,
    FRAME_BLURRED,
    LOW_TEXTURE,
    SATURATED,
    EVENTS_LOST,
    FLASH,
    LEFT_PICTURE,
    UNCERTAIN,
    NO_FRAME,
    DUPLICATE,
) = range(len(REASONS))

SOURCES = ("frame", "events", "both")
FROM_FRAME, FROM_EVENTS, FROM_BOTH = range(len(SOURCES))
