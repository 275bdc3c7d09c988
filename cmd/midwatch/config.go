package main

import (
	"errors"
	"os"

	"github.com/spf13/cobra"

	"midwatch/configs"
)

// configFlag adds -c, which names the configuration.
func configFlag(c *cobra.Command, path *string) {
	c.Flags().StringVarP(path, "config", "c", "", "configuration (required; or MIDWATCH_CONFIG)")
}

// configPath is what -c says, or the environment.
func configPath(path string) (string, error) {
	if path == "" {
		path = os.Getenv("MIDWATCH_CONFIG")
	}
	if path == "" {
		return "", usagef("no configuration is named; hint: -c midwatch.yaml")
	}
	return path, nil
}

// loadConfig reads the configuration with everything it names; loadPlain leaves
// the files alone that hold secrets.
func loadConfig(path string) (*configs.Config, error) { return load(path, configs.Load) }
func loadPlain(path string) (*configs.Config, error) {
	return load(path, configs.LoadWithoutSecrets)
}

func load(path string, read func(string, func(string) string) (*configs.Config, error)) (*configs.Config, error) {
	path, err := configPath(path)
	if err != nil {
		return nil, err
	}
	c, err := read(path, os.Getenv)
	if errors.Is(err, os.ErrNotExist) {
		return nil, usagef("%w; hint: -c names the configuration", err)
	}
	if err != nil {
		return nil, usage{err}
	}
	return c, nil
}
