"""``python -m benchmarks`` prints the table of ratios."""

from benchmarks.speed import main

main()
