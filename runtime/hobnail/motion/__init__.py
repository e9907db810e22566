"""Pure maths of walking: no I/O, no clock, no logging, no configuration, no threads."""
