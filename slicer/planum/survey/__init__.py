"""What the crew wrote down: survey.toml, the line register, control points."""
