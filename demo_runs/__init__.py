"""An invented reaction, its simulator, and a player that acts as an instrument would."""
