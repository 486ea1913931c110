"""Truth with error bars."""
