"""How far a result is to be trusted: certificates, starts, amplitudes, comparison, range of validity, approximants."""
