"""What proves a run: its folder, its log, its environment, its manifest."""
