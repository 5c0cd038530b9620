"""The screen: the only room that knows Textual."""

import os

# Textual reads these once, as it is imported.  They are only defaults: who sets them keeps them.
for _name, _value in {
    # A function key that a slow line splits in two must not become five commands.
    "ESCDELAY": "300",
    # Movement for its own sake costs kilobytes on a slow line.
    "TEXTUAL_ANIMATIONS": "none",
    "TEXTUAL_SMOOTH_SCROLL": "0",
    # What changed is painted as soon as there is nothing else to do; this only bounds how soon.
    "TEXTUAL_FPS": "500",
    # A dropped line would leave the terminal typing escape codes.
    "TEXTUAL_DISABLE_KITTY_KEY": "1",
}.items():
    os.environ.setdefault(_name, _value)
