"""Generated sequences of sound and unsound frames, judged by the model and by whether sound requests are answered."""
