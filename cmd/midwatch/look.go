package main

import (
	"midwatch/alert/page/api"
	"midwatch/cmd/internal/daemon"
	"midwatch/configs"
)

// lookInto reads the state of a watch that does not run from its data folder.
func lookInto(c *configs.Config) (api.Status, []api.Loop, error) {
	f, err := daemon.Look(c)
	if err != nil {
		return api.Status{}, nil, err
	}
	s, rows := f.Status(), api.Loops(f.Loops())
	return s, rows, f.Close()
}
