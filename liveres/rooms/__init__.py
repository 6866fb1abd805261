"""Rooms with a loudspeaker and a microphone in them: impulse responses, the closed loop, and what it can bear."""
