// Package npy streams NumPy .npy arrays of 1–4 axes (versions 1–3; u8 u16 i16 i32 f32
// f64 and i64 where whole; either byte order, C or Fortran order).
package npy
