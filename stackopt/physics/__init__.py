"""Fields and media: the physics, readable and independent of files, searches and compiled code."""
