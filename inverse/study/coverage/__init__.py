"""Whether intervals hold the truth as often as they say."""
