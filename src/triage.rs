//! The main job, end to end.
