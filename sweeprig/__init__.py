"""sweeprig: what a small PWM-driven motor can do, found overnight and with uncertainties."""
