"""SQL read into the algebra and written from it."""
