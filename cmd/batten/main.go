// Batten runs curve studies: from one spec file and the data it names to
// fitted curves, exports, reports and a ledger of what was accepted.
package main

import (
	"context"
	"os"
	"os/signal"
	"syscall"

	"batten/cmd/batten/cli"
)

func main() {
	ctx, stop := signal.NotifyContext(context.Background(), os.Interrupt, syscall.SIGTERM)
	code := cli.Run(ctx, os.Args[1:], os.Stdin, os.Stdout, os.Stderr)
	stop()
	os.Exit(code)
}
