"""What holds for every market and every plan, tried on random ones."""
