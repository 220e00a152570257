"""Where an arc will be, and how bright: pure functions on numbers, no tables."""
