"""Ways of cutting a signal into epochs."""
