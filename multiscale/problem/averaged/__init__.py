"""Forces that are not polynomial, by their averages over a cycle: recognition, closed forms, harmonics."""
