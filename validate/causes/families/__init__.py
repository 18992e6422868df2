"""The families of causes: every module here registers its own faults when it is imported."""
