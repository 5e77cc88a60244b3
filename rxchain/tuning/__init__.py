"""From the wideband stream to channels: rates that fit together, and the bank that makes every channel at once."""
