"""The forward side: what the sky, the Moon, the Earth and the instrument do."""
