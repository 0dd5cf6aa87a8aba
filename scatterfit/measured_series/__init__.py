"""What many pulses of one bench say about what they share."""
