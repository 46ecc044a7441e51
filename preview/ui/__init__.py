"""The desk, on a screen and in lines."""

import os

# A change is painted at the library's next beat but one: at its usual 60 a second a key may wait 35 ms for that.
os.environ.setdefault("TEXTUAL_FPS", "180")
