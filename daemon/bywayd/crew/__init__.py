"""The crew: processes that compute for the front, and what they share with it."""
