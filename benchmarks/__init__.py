"""Performance, shown as ratios with both sides measured in the same run: ``make bench``."""
