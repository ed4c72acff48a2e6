//! Converters outside the microcontroller: drivers that turn bus transactions into pairs.
//!
//! A timer interrupt converts, the main loop examines: [`hand_over`] lies between the two. Each part
//! has a file of its own: [`ltc1407`].

pub mod hand_over;
pub mod ltc1407;
