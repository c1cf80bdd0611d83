"""What difference the exposure makes: weighted means and their contrasts, and weighted regression."""
