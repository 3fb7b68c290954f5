"""From a recipe and recordings to tasks: pure data, nothing read beyond headers and digests."""
