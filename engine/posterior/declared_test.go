package posterior_test

import "leadline.example/engine/posterior"

// vaguePrior is the flat prior.
func vaguePrior() posterior.Prior { return posterior.Prior{Vague: true} }

// absentNoise is that of a quantity whose readings bring their own.
func absentNoise() posterior.Noise { return posterior.Noise{Absent: true} }

// knownNoise is a known repeatability r > 0.
func knownNoise(r float64) posterior.Noise { return posterior.Noise{Known: true, SD: r} }

// learnedNoise is a repeatability to be learned from a guess worth so many
// degrees of freedom; both 0 for the reference prior.
func learnedNoise(guess, worth float64) posterior.Noise {
	return posterior.Noise{Guess: guess, Worth: worth}
}
