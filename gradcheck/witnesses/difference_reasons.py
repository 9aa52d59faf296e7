"""Why the difference witness gives an infinite or a wide bound, in words."""

from gradcheck.witnesses.ladder import Nature

REASONS = {
    Nature.KINK: "kink at the point: the slopes on both sides differ",
    Nature.JUMP: "jump at the point: the values on both sides differ",
    Nature.PLATEAU: "plateau: the values do not change at all at small steps",
    Nature.STEEP: "the difference quotients grow without limit as the step shrinks",
}
BREAK = "curvature break at the point: the second derivatives on both sides differ"
DISAGREE = "break at the point: the second derivatives along different directions do not fit together"
TOO_NARROW = "steps that fit here are too small: their squares leave the range of floating-point numbers"
UNSETTLED = "the values settle at no step size"
SPENT = "the budget was spent"
NO_ROOM = "the bounds leave no room for a step"
FAILS = "the model fails close to the point"
CUT_OFF = "digits are cut off: the values do not change at small steps"
RIPPLED = "small steps and wide steps see different slopes: a ripple, an inner tolerance, or digits that were cut off"

#: Reasons that noise can bring about.
DOUBTS = (REASONS[Nature.JUMP], REASONS[Nature.PLATEAU], UNSETTLED, CUT_OFF, RIPPLED)
