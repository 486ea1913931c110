"""What a processor's samples are worth against the truth."""
