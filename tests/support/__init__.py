"""What several tests need: published tensors, synthetic crystals of every Laue class, random rotations and settings."""
