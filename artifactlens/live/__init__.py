"""Work on a stream while it is recorded (optional extra ``live``)."""
