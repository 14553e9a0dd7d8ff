"""What to do about a likely cause: one or two sentences each."""

from oakum.audits import Cause

ADVICE = {
    Cause.CUT_SHORT: (
        "Look at how the file was copied and at the free space there; repair it, then copy it again."
    ),
    Cause.LINE_ENDS: (
        "A transfer in text mode did this, not the medium; transfer in binary mode and repair."
    ),
    Cause.REWRITTEN: (
        "Decay does not do this. Find out who or what wrote the file before repairing it: if it was "
        "meant, protect it anew; if not, suspect malicious encryption and disconnect the medium."
    ),
    Cause.FILLED_END: (
        "A copy was not written out before the medium was removed; repair, and unmount media first."
    ),
    Cause.FILLED_INSIDE: (
        "A hole of this kind comes from a lost write or a skipped bad place; read the drive's own "
        "log, and copy the medium."
    ),
    Cause.PAST_OFFSET: (
        "Compare with another copy: bytes lost or added at that place shift all that follows; look "
        "at the transfer that made this copy."
    ),
    Cause.ALIGNED: (
        "A drive, controller or file system replaced whole units: check its log and its counters, "
        "and copy the medium to another one."
    ),
    Cause.UNREADABLE: (
        "Stop using the medium, make an image of it with a tool that notes bad places, and repair "
        "from the image."
    ),
    Cause.UNSTEADY: (
        "Check cable, reader and memory, and audit again on another machine before judging the medium."
    ),
    Cause.HIGH_BIT: ("A 7-bit transfer did this, not the medium; transfer in binary mode and repair."),
    Cause.STUCK_BIT: (
        "Suspect memory or a bus rather than the medium: test the memory of each machine that wrote "
        "or read the copy, and audit on another one."
    ),
    Cause.DIRECTION: (
        "Charge that leaks or a weak read level flips bits one way: refresh the medium, and audit it sooner."
    ),
    Cause.PERIOD: (
        "Something mechanical or in the format repeats at that distance, such as a track, a head or "
        "an interleave: clean the drive and read with another one."
    ),
    Cause.RUNS: (
        "Something wrote or damaged these stretches; look at the medium's surface and at the drive's log."
    ),
    Cause.SCATTERED: ("Ordinary decay; watch its trend with oakum history."),
}
