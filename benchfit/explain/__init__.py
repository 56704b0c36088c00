"""Parts from constants, the miss budget, suspects, next readings and remedies."""
