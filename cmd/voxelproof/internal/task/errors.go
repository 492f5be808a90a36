// Package task holds one request value per operation: check it, run it, report
// progress. The command line builds these requests and prints their answers;
// whatever computes stands in the packages below.
package task

import "fmt"

// UsageError is a request that cannot be meant: the caller has to change it.
type UsageError struct{ msg string }

func (e *UsageError) Error() string { return e.msg }

func usagef(format string, args ...any) error {
	return &UsageError{fmt.Sprintf(format, args...)}
}

// PartlyError says that a result was made and part of the work left out.
type PartlyError struct{ msg string }

func (e *PartlyError) Error() string { return e.msg }

// Progress reports how far a named step has come.
type Progress func(step string) func(done, total int)

func (p Progress) step(name string) func(done, total int) {
	if p == nil {
		return func(int, int) {}
	}
	return p(name)
}

// Usage marks an error as a request that cannot be meant.
func Usage(err error) error { return &UsageError{err.Error()} }
