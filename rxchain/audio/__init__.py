"""What happens to a message between its detector and the ear: squelch, gain control, rate conversion."""
