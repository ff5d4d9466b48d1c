"""Every read of the register, at a moment. Nothing here writes, and nothing here decides who may read."""
