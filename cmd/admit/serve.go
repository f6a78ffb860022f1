package main

import (
	"context"
	"fmt"
	"os"
	"os/signal"
	"syscall"

	"github.com/spf13/cobra"

	"example.com/admit/cmd/admit/config"
)

// serveCommand runs the server.
func serveCommand() *cobra.Command {
	var file string
	override := config.Config{}
	c := &cobra.Command{
		Use:   "serve",
		Short: "Run the server; SIGTERM drains, a second one hurries",
		Args:  bad(cobra.NoArgs),
		RunE: func(c *cobra.Command, _ []string) error {
			settings, err := load(c, file, &override)
			if err != nil {
				return err
			}
			s, err := build(settings, logger(settings.Log))
			if err != nil {
				return err
			}
			defer hurryOnSecondSignal(c.Context(), s)()
			return s.run(c.Context())
		},
	}
	c.Flags().StringVar(&file, "config", "", "configuration file (YAML)")
	c.Flags().StringVar(&override.Store, "store", "", "folder of the store, on a local disk")
	c.Flags().StringVar(&override.Listen, "listen", "", "address for stations (gRPC)")
	c.Flags().StringVar(&override.HTTP, "http", "", "address for people and Prometheus")
	return c
}

// load reads file and environment, lets the flags that were given override them, and checks the whole.
func load(c *cobra.Command, file string, override *config.Config) (config.Config, error) {
	settings, err := config.Load(file, os.Environ(), func(settings *config.Config) {
		for flag, target := range map[string]struct{ to, from *string }{
			"store":  {&settings.Store, &override.Store},
			"listen": {&settings.Listen, &override.Listen},
			"http":   {&settings.HTTP, &override.HTTP},
		} {
			if c.Flags().Changed(flag) {
				*target.to = *target.from
			}
		}
	})
	if err != nil {
		return settings, badInput{err}
	}
	return settings, nil
}

// hurryOnSecondSignal cuts the grace period short when a second signal comes; the returned function ends the watch.
func hurryOnSecondSignal(ctx context.Context, s *server) (stop func()) {
	signals := make(chan os.Signal, 2)
	done := make(chan struct{})
	go func() {
		select {
		case <-ctx.Done():
		case <-done:
			return
		}
		signal.Notify(signals, os.Interrupt, syscall.SIGTERM)
		defer signal.Stop(signals)
		select {
		case <-signals:
			s.rpc.Hurry()
		case <-done:
		}
	}()
	return func() { close(done) }
}

// checkConfigCommand checks a configuration and does nothing else.
func checkConfigCommand() *cobra.Command {
	var file string
	c := &cobra.Command{
		Use:   "check-config",
		Short: "Check a configuration file and the certificates it names, and list every fault",
		Args:  bad(cobra.NoArgs),
		RunE: func(c *cobra.Command, _ []string) error {
			settings, err := config.Load(file, os.Environ(), nil)
			if err != nil {
				return badInput{err}
			}
			if _, err := certificatesOf(settings, logger(settings.Log)); err != nil {
				return badInput{err}
			}
			fmt.Fprintln(c.OutOrStdout(), "the configuration is good")
			return nil
		},
	}
	c.Flags().StringVar(&file, "config", "", "configuration file (YAML)")
	return c
}
