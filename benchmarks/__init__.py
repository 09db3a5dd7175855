"""Speed, measured: ratios in one run against yardsticks. ``python -m benchmarks`` runs all."""
