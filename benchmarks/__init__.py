"""Speed, measured: ratios in one run against named yardsticks. ``python -m benchmarks`` runs all."""
