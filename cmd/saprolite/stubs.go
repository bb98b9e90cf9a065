package main

import "github.com/spf13/cobra"

func newDemo() *cobra.Command  { return &cobra.Command{Use: "demo"} }
func newInit() *cobra.Command  { return &cobra.Command{Use: "init"} }
func newCheck() *cobra.Command { return &cobra.Command{Use: "check"} }
func newRun() *cobra.Command   { return &cobra.Command{Use: "run"} }
func newLoad() *cobra.Command  { return &cobra.Command{Use: "load"} }
func newShow() *cobra.Command  { return &cobra.Command{Use: "show"} }
