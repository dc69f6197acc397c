// Package exact computes tails, bounds and critical counts of discrete laws to nearly full
// float64 accuracy in relative terms, in the deepest tail as in the body.
//
// The laws: Poisson, Binomial, NegativeBinomial, BetaBinomial, Hypergeometric, FisherNoncentral,
// PoissonBinomial, and the waiting times Wait and TrialWait. The two-sample tests: TwoRate and
// TwoProportion. Bounds: Garwood, ClopperPearson, their mid-p forms, and MeanBounds and
// ChanceBounds for the minimum-likelihood and Blaker's form; RatioBounds and OddsRatioBounds
// beside the tests. Plans: CriticalUpper and CriticalLower with the attained size, PowerUpper and
// PowerLower, NeededExposure and NeededTrials. Holm, Hochberg, BenjaminiHochberg and
// BenjaminiYekutieli adjust many p-values, FalseCoverage the bounds of those selected.
//
// The model. Every tail is the probability of one count, from its deviance in double-double
// (Loader 2000, Fast and accurate computation of binomial probabilities), times the ratio
// tail/probability: a sum or an integral of positive terms, or a uniform expansion; past the
// middle it is one minus such a tail. Nothing is computed as one minus the bulk, and the
// logarithm of a tail stays right where the tail itself underflows.
//
// Parameters are taken as they are had: alpha rather than confidence, rate and exposure rather
// than their product, a probability with its complement. Alpha is two-sided: each side of a
// pair of bounds has alpha/2, also where the other side is trivial (no events, or nothing but
// events). One-sided bounds take their whole level: MeanLower, MeanUpper, ChanceLower, ChanceUpper.
//
// Caveats. "Exact" is said of the arithmetic and of the law named: whether counts follow that law
// is another question. Counts and totals go to 2^53 (2^42 balls of a colour in an urn, 2^22
// trials of a beta-binomial). Values outside a domain give NaN and ok = false, never a panic. A
// size within 4e-15 of a limit counts as at the limit, so that one that hits it exactly (five of
// five at 1/2 against 1/32) is not lost to rounding. Below 2.2e-308 only logarithms mean anything.
//
// The accuracy and speed tables of README.md, beside gonum's and R's, are printed by
//
//	go test ./exact -run TestFigures -figures -v
package exact
