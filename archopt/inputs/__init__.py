"""What a person writes: study, catalogue, load profile; read, checked and resolved."""
