// Package resample says how sure an estimate is by working it out again and
// again on parts and redraws of its own data: the jackknife, the moving-block
// bootstrap, and p-values by simulation.
//
// The model:
//   - A Statistic is a pure function of the positions drawn, so that one form
//     serves the estimate, the jackknife and the bootstrap.
//   - Draws are made in chunks of a fixed size. Each chunk has its own source,
//     derived from the seed and the chunk's number: a result depends on seed and
//     number of draws, never on the number of workers or on their timing.
//   - Samplers (Binomial, Splitter, Urn) are exact up to the rounding of
//     float64; none goes by way of a normal or Poisson approximation.
//   - A p-value by simulation carries exact bounds of its own (Clopper and
//     Pearson), since the number of draws past the observed value is binomial.
//
// Caveats. The bootstrap needs some twenty periods to say anything, and a block
// longer than the correlation it is to keep; its intervals are approximate,
// unlike those of package exact. A jackknife standard error assumes a smooth
// statistic: it fails for a median.
package resample
