"""Looking at runs: films of them, pictures, and a window."""

import os

os.environ.setdefault("PYGAME_HIDE_SUPPORT_PROMPT", "1")  # pygame's greeting would stand between the console's lines
