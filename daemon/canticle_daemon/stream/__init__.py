"""Pure block filters; `pipeline` tells the story."""
