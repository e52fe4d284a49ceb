"""The tick of a rig: controller, plant, sample. Synchronous; it never waits and does no I/O."""
