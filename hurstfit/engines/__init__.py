"""Ways to explore a posterior, and to judge whether it has been explored."""
