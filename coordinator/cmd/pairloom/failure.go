package main

import (
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"strings"

	"github.com/spf13/cobra"
	"github.com/spf13/pflag"

	"pairloom/sparse/exit"
)

// flagError says what is wrong with a flag, and which was perhaps meant.
func flagError(c *cobra.Command, err error) error {
	help := "see " + c.CommandPath() + " --help"
	var unknown *pflag.NotExistError
	var value *pflag.InvalidValueError
	switch {
	case errors.As(err, &unknown) && unknown.GetSpecifiedShortnames() == "":
		if near := nearest(unknown.GetSpecifiedName(), c.Flags()); near != "" {
			return usage("unknown flag --%s; did you mean --%s? %s", unknown.GetSpecifiedName(), near, help)
		}
	case errors.As(err, &value):
		f := value.GetFlag()
		return usage("--%s %q; %s was expected; %s", f.Name, value.GetValue(), expected(f.Value.Type()), help)
	}
	return usage("%w; %s", err, help)
}

// expected names what a flag of some type takes.
func expected(kind string) string {
	switch kind {
	case "int":
		return "a whole number"
	case "float64":
		return "a number"
	case "duration":
		return "a time like 30s or 5m"
	case "bool":
		return "true or false"
	}
	return "a " + kind
}

// nearMost is how many edits a name may be away to be suggested.
const nearMost = 3

// nearest is the flag whose name is closest to name, or has it as a beginning.
func nearest(name string, flags *pflag.FlagSet) (best string) {
	least := min(nearMost, len(name)-1) + 1
	flags.VisitAll(func(f *pflag.Flag) {
		d := edits(name, f.Name)
		if strings.HasPrefix(f.Name, name) {
			d = 1
		}
		if d < least {
			best, least = f.Name, d
		}
	})
	return best
}

// edits is the number of letters to insert, remove or change that lead from a to b
// (Levenshtein 1966). O(len(a)·len(b)).
func edits(a, b string) int {
	row := make([]int, len(b)+1)
	for j := range row {
		row[j] = j
	}
	for i := range len(a) {
		before := row[0]
		row[0] = i + 1
		for j := range len(b) {
			change := before
			if a[i] != b[j] {
				change++
			}
			before = row[j+1]
			row[j+1] = min(change, row[j]+1, before+1)
		}
	}
	return row[len(b)]
}

// unknownCommand is the error of a name that is no command.
func unknownCommand(c *cobra.Command, args []string) error {
	if len(args) == 0 {
		return nil
	}
	if near := c.SuggestionsFor(args[0]); len(near) > 0 {
		return usage("unknown command %q; did you mean %s? %s --help lists all", args[0], strings.Join(near, " or "), c.CommandPath())
	}
	return usage("unknown command %q; %s --help lists all", args[0], c.CommandPath())
}

// needsInput accepts one input or more.
func needsInput(c *cobra.Command, args []string) error {
	if len(args) == 0 {
		return usage("%s needs an input; see %s --help", c.Name(), c.CommandPath())
	}
	return nil
}

// failure is what a command with --json says on stdout when it fails.
type failure struct {
	Error string `json:"error"`
	Code  int    `json:"code"`
}

// tellFailure says why a command failed: on one line, but for a list that helps with usage.
func tellFailure(c *cobra.Command, out, errs io.Writer, err error) int {
	code, text := exit.Code(err), err.Error()
	if code != exit.Usage {
		text = strings.ReplaceAll(text, "\n", " ")
	}
	fmt.Fprintln(errs, "pairloom: "+text)
	if f := c.Flags().Lookup("json"); f != nil && f.Value.String() == "true" && c.Annotations[oneJSON] != "" {
		e := json.NewEncoder(out)
		e.SetEscapeHTML(false)
		_ = e.Encode(failure{text, code})
	}
	return code
}

// oneJSON marks commands whose --json promises one object on stdout, also after an error.
const oneJSON = "one-json"
