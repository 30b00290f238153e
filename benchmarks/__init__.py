"""Side-by-side ratios: flyoff against a frozen rival, interleaved in one process."""
