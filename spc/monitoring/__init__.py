"""From records to statistics and back: streams, points, baselines, signals, excursions."""
