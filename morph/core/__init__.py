"""What every layer uses: errors, verdicts, checked arrays, units, files, progress."""
