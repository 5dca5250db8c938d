// Package scpi speaks IEEE 488.2 and SCPI-1999 with counters, shutters, sensors and settings.
package scpi

import (
	"errors"

	"gemel/drivers"
	"gemel/drivers/line"
)

var errNotYet = errors.New("not built yet")

type (
	Counter struct{ drivers.Counter }
	Shutter struct{ drivers.Shutter }
	Sensor  struct{ drivers.Sensor }
	Setting struct{ drivers.Setting }
)

func NewCounter(l *line.Line, c CounterConfig) (*Counter, error) { return nil, errNotYet }
func NewShutter(l *line.Line, c ShutterConfig) (*Shutter, error) { return nil, errNotYet }
func NewSensor(l *line.Line, c SensorConfig) (*Sensor, error)    { return nil, errNotYet }
func NewSetting(l *line.Line, c SettingConfig) (*Setting, error) { return nil, errNotYet }
