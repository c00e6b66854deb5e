//! The oscilloscope: settings, trigger, clipping, sample rate, what a record holds.
