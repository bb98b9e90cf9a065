// Package stat holds the statistics that gonum lacks, each with its source.
//
// Use it for samples of whole years (L-moments, Gumbel). Use gonum's stat and
// distuv for everything they have. No function changes its arguments.
package stat
