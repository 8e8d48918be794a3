"""What is known of the base relations."""
