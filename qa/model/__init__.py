"""What every other part shares, and what imports none of them: errors, units, columns, logs, survey files, findings."""
