"""What the window can be told to do, and the keys for it."""

from __future__ import annotations

from enum import StrEnum
from typing import NamedTuple


class Command(StrEnum):
    """One thing to do; the value is its name in messages."""

    PAUSE = "pause"
    BACK = "back"
    FORWARD = "forward"
    TO_START = "to start"
    TO_END = "to end"
    SLOWER = "slower"
    FASTER = "faster"
    NEXT_STRIKE = "next strike"
    PREVIOUS_STRIKE = "previous strike"
    NEXT_FAILURE = "next failure"
    PREVIOUS_FAILURE = "previous failure"
    ZOOM_IN = "zoom in"
    ZOOM_OUT = "zoom out"
    PAN_LEFT = "pan left"
    PAN_RIGHT = "pan right"
    PAN_UP = "pan up"
    PAN_DOWN = "pan down"
    WHOLE = "whole rig"
    FOLLOW = "follow"
    LET_GO = "let go"
    TRAILS = "trails"
    LAP = "lap"
    YAW = "yaw"
    POINT_WORLD = "point world"
    NEXT_SEED = "next seed"
    PREVIOUS_SEED = "previous seed"
    NEXT_PARAMETER = "next parameter"
    PREVIOUS_PARAMETER = "previous parameter"
    LOWER = "lower"
    RAISE = "raise"
    PICTURE = "picture"
    HELP = "help"
    CLOSE = "close"


class Binding(NamedTuple):
    """A command, the keys for it as `KeyDown` writes them, and what it does."""

    command: Command
    keys: tuple[str, ...]
    words: str

    @property
    def key_words(self) -> str:
        """The keys for people."""
        return " or ".join(_KEY_WORDS.get(key, key.upper() if len(key) == 1 else _spelled(key)) for key in self.keys)


_KEY_WORDS = {"-": "Minus", "+": "Plus", ",": "Comma", ".": "Period", "=": "="}


def _spelled(key: str) -> str:
    return "+".join(part.capitalize() for part in key.split("+"))


BINDINGS = (
    Binding(Command.PAUSE, ("space",), "pause, or go on"),
    Binding(Command.BACK, ("left",), "1 s back; paused: 1 sample"),
    Binding(Command.FORWARD, ("right",), "1 s on; paused: 1 sample"),
    Binding(Command.TO_START, ("home",), "to the start"),
    Binding(Command.TO_END, ("end",), "to the end so far"),
    Binding(Command.SLOWER, ("-",), "half as fast"),
    Binding(Command.FASTER, ("+", "="), "twice as fast"),
    Binding(Command.NEXT_STRIKE, ("s",), "next strike"),
    Binding(Command.PREVIOUS_STRIKE, ("shift+s",), "previous strike"),
    Binding(Command.NEXT_FAILURE, ("e",), "next named failure"),
    Binding(Command.PREVIOUS_FAILURE, ("shift+e",), "previous named failure"),
    Binding(Command.ZOOM_IN, ("z",), "nearer (or wheel)"),
    Binding(Command.ZOOM_OUT, ("x",), "farther (or wheel)"),
    Binding(Command.PAN_LEFT, ("shift+left",), "look left (or drag)"),
    Binding(Command.PAN_RIGHT, ("shift+right",), "look right"),
    Binding(Command.PAN_UP, ("shift+up",), "look up"),
    Binding(Command.PAN_DOWN, ("shift+down",), "look down"),
    Binding(Command.WHOLE, ("w",), "the whole rig"),
    Binding(Command.FOLLOW, ("f",), "follow the next (or click)"),
    Binding(Command.LET_GO, ("shift+f",), "follow none (or click again)"),
    Binding(Command.TRAILS, ("t",), "trails: none, short, long"),
    Binding(Command.LAP, ("l",), "planned lap"),
    Binding(Command.YAW, ("y",), "yaw drawn 1, 5, 20 fold"),
    Binding(Command.POINT_WORLD, ("d",), "point world beside it"),
    Binding(Command.NEXT_SEED, ("n",), "next seed, from the start"),
    Binding(Command.PREVIOUS_SEED, ("b",), "previous seed, from the start"),
    Binding(Command.NEXT_PARAMETER, ("down",), "choose the next value"),
    Binding(Command.PREVIOUS_PARAMETER, ("up",), "choose the previous value"),
    Binding(Command.LOWER, (",",), "lower it, and start anew"),
    Binding(Command.RAISE, (".",), "raise it, and start anew"),
    Binding(Command.PICTURE, ("p",), "save a picture (PNG)"),
    Binding(Command.HELP, ("h", "f1"), "this list"),
    Binding(Command.CLOSE, ("q", "escape"), "close"),
)

BY_KEY = {key: binding.command for binding in BINDINGS for key in binding.keys}

# what goes on while a key is held down; the others act once
REPEATING = {
    Command.BACK,
    Command.FORWARD,
    Command.ZOOM_IN,
    Command.ZOOM_OUT,
    Command.PAN_LEFT,
    Command.PAN_RIGHT,
    Command.PAN_UP,
    Command.PAN_DOWN,
    Command.NEXT_STRIKE,
    Command.PREVIOUS_STRIKE,
    Command.LOWER,
    Command.RAISE,
}
