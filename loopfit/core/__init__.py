"""Words that every part uses: quantities, findings, errors, plain data."""
