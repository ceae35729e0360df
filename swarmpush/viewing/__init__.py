"""Looking at runs: films of them, pictures, and a window."""
