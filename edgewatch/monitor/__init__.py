"""The station as a state machine: pictures, orders, ticks and failures in, effects out."""
