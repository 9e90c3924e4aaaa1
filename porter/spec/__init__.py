"""The spec room: a YAML file in, a checked `Circuit` with positions out."""
