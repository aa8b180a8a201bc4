"""The procedures: each is a few plans under limits of its own, and what is made of their samples."""
