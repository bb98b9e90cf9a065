// Command saprolite keeps, stand by stand and day by day, the account of the
// water trees live on, and warns before a stand runs out of it.
//
// This room parses, wires and runs. It holds no science and no formats.
package main

import (
	"context"
	"io"
	"os"
	"os/signal"
	"syscall"
)

func main() {
	os.Exit(saprolite(context.Background(), os.Args[1:], os.Stdin, os.Stdout, os.Stderr))
}

// saprolite is the whole program as a function, so that a test can call it:
// it returns the exit code (design 5.9).
func saprolite(ctx context.Context, args []string, in io.Reader, out, errs io.Writer) int {
	ctx, stop := signal.NotifyContext(ctx, os.Interrupt, syscall.SIGTERM)
	defer stop()
	context.AfterFunc(ctx, stop) // a second signal ends the program at once
	root := newRoot()
	root.SetArgs(args)
	root.SetIn(in)
	root.SetOut(out)
	root.SetErr(errs)
	return exitCode(root.ExecuteContext(ctx), errs)
}
