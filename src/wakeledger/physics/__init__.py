"""From a plane and a reference state to estimates."""
