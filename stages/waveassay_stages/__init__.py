"""The stages that ship, one a file, found through the same entry point as a stranger's."""
