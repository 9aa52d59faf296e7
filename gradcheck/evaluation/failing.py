"""What a failing model said last."""

import traceback


def last_words(error: BaseException) -> str:
    """Type, message and the user's own line of an exception, in one line."""
    frames = traceback.extract_tb(error.__traceback__)
    # The last frame may lie deep inside a library; the user's line is what helps.
    own = [
        frame
        for frame in frames
        if "site-packages" not in frame.filename and "gradcheck/evaluation" not in frame.filename
    ]
    where = f" ({own[-1].filename}:{own[-1].lineno})" if own else ""
    text = " ".join(str(error).split())
    return f"{type(error).__name__}: {text[:300]}{where}" if text else f"{type(error).__name__}{where}"
