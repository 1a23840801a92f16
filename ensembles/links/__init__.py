"""The same particles in every frame, unlabelled: who is who, and what their motion says about the prior."""
