"""The streets, built once: from an extract to frozen arrays and tables."""
