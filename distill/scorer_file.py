"""What a scorer file may hold, checked on its bytes before anything runs it; floor 1, light."""
