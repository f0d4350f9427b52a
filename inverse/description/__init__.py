"""What is known, measured and sought: materials, stacks, setups, traces and unknowns."""
