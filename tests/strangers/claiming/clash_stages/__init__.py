"""A package that claims a name that is taken."""
