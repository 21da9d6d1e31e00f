"""The parts of planning, in their order, and what a person reads of them."""

WAITING, READING, SIZING, WRITING, SETTLING, ENDED = (
    "waiting", "reading", "sizing", "writing", "settling", "ended",
)  # fmt: skip

PHASES = {
    WAITING: "Waiting for its turn.",
    READING: "Reading the target.",
    SIZING: "Looking at the shelf and sizing the routes.",
    WRITING: "Writing steps, hazards and drawings.",
    SETTLING: "Setting the amounts aside.",
    ENDED: "Planning has ended.",
}
