"""Pictures: what to show is picked from data in one layer and drawn from arrays in another."""
