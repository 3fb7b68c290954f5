"""A package that does not load."""

raise ImportError("the library it needs is not installed")
