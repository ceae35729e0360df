"""The point world: exact runs, bumps and turns of a disc."""
