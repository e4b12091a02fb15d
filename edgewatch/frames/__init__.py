"""Where pictures come from: camera, clip, pipe, stream, rehearsal."""
