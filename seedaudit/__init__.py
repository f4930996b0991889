"""seedaudit: does a seed-correlation result survive a small shift of its seed?"""
