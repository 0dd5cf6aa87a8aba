"""What each detector and the transmitted beam would show; noise; simulation."""
