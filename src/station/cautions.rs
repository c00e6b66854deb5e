//! The cautions that stand in help, before power and in every report: one fixed text.

/// What to heed at live offline hardware.
pub const CAUTIONS: [&str; 8] = [
    "The board is live mains hardware: rectified, a 265 V line is a 375 V bus, and the drain of the switch can reach 600 V \
     and more. Touching it can kill.",
    "After switch-off the bulk capacitor stays charged, for minutes where nothing bleeds it. Measure it below 60 V before \
     touching anything.",
    "Isolate the unit under test with an isolation transformer or an isolated source. Never isolate or float the \
     oscilloscope: its case would stand at the voltage of whatever its probe's clip touches.",
    "Use a differential probe rated for the whole drain voltage at the ring's frequency. An earth-referenced probe's clip \
     connects the primary to earth, and shorts the line where the source is not isolated.",
    "LAN, USB and GPIB cables connect an instrument to earth again, whatever its mains lead does.",
    "Keep one hand away from the bench while it is energised, stand clear of conducting surfaces, and do not work alone.",
    "This program switches source and load off when it ends, but it protects nobody: have an emergency switch in reach that \
     cuts the source without it.",
    "Local codes and the judgement of licensed, trained people decide, not this program.",
];
