"""From measured physiology and ocean files to the depths where an animal can breathe."""
