package report

import (
	"fmt"
	"io"
	"strings"
)

// holes names the classes of a degree for people: one, many.
func holes(k int) (one, many string) {
	switch k {
	case 0:
		return "connected component", "connected components"
	case 1:
		return "independent loop", "independent loops"
	case 2:
		return "enclosed void", "enclosed voids"
	}
	return fmt.Sprintf("class of degree %d", k), fmt.Sprintf("classes of degree %d", k)
}

// Words says what came out, for a person: what the complex is, what is left at its end
// in each degree, the few pairs that last longest, and what was checked.
func (s *Summary) Words(w io.Writer) {
	var total uint64
	for _, d := range s.PerDegree {
		total += uint64(d.Cells)
	}
	fmt.Fprintf(w, "A %s complex of %d cells, %s.\n", s.Kind, total, s.dimension())
	for k, b := range s.Betti {
		if b != nil {
			s.wordsOf(w, k, *b)
		}
	}
	if s.Truncated {
		fmt.Fprintf(w, "Cut above degree %d: nothing is claimed for higher degrees (--degrees asks for more).\n", s.Degrees)
	}
	if g := s.Graph; g != nil {
		fmt.Fprintf(w, "As a directed multigraph: %d vertices, %d edges, rank %d, %s, %s.\n", g.Vertices, g.Edges, g.Rank,
			count(g.Components, "component", "components"), count(g.Loops, "independent loop", "independent loops"))
	}
	for _, n := range s.notes {
		fmt.Fprintf(w, "Note: %s: %d.\n", n.What, n.Count)
	}
	s.wordsOfChecks(w)
}

// dimension says which degrees of the input were looked at.
func (s *Summary) dimension() string {
	last := len(s.PerDegree) - 1
	if s.Truncated {
		return fmt.Sprintf("cells of degree 0 to %d", last)
	}
	return fmt.Sprintf("dimension %d", last)
}

func count(n uint64, one, many string) string {
	if n == 1 {
		return "1 " + one
	}
	return fmt.Sprintf("%d %s", n, many)
}

// wordsOf tells a degree: what is left at the end, and what lasted longest before.
func (s *Summary) wordsOf(w io.Writer, k int, betti uint64) {
	one, many := holes(k)
	fmt.Fprintf(w, "Degree %d: %s at the end (Betti number %d)", k, count(betti, one, many), betti)
	end := ".\n"
	for _, l := range s.longest {
		if l.Degree != k {
			continue
		}
		if end == ".\n" {
			fmt.Fprint(w, "; of those that end before, the longest-lived:\n")
			end = ""
		}
		fmt.Fprintf(w, "    from %s (cell %s) to %s (cell %s), a length of %s\n", number(nil, l.Birth), l.Born, number(nil, l.Death), l.Dies, short(l.Death-l.Birth))
	}
	fmt.Fprint(w, end)
}

// short is a difference of values for reading: it was rounded anyway.
func short(v float64) string { return fmt.Sprintf("%.6g", v) }

// wordsOfChecks names the evidence that held, and what was not looked at.
func (s *Summary) wordsOfChecks(w io.Writer) {
	var passed []string
	for _, c := range s.evidence {
		if c.Verdict == "passed" {
			passed = append(passed, c.Name)
		}
	}
	if len(passed) > 0 {
		fmt.Fprintf(w, "Checked: %s.\n", strings.Join(passed, "; "))
	}
	for _, c := range s.evidence {
		if c.Verdict != "passed" {
			fmt.Fprintf(w, "Not checked: %s (%s).\n", c.Name, c.Verdict)
		}
	}
}
