"""One small stage of each kind, from which `stackbound new-plugin` makes a project."""
