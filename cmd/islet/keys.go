package main

import (
	"context"
	"fmt"

	"islet/cases"
)

func cmdKeys(ctx context.Context, c *call) error {
	kind := ""
	if len(c.args) == 1 {
		kind = c.args[0]
	}
	text, err := cases.Reference(kind)
	if err != nil {
		return fmt.Errorf("%w: %w", errUsage, err)
	}
	_, err = fmt.Fprint(c.stdout, text)
	return err
}
