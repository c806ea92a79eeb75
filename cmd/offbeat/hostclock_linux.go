package main

import "golang.org/x/sys/unix"

// hostClockKept says whether the kernel takes the host's clock for disciplined,
// by NTP or otherwise (adjtimex(2)).
func hostClockKept() bool {
	var t unix.Timex // no mode bits: only asks
	state, err := unix.Adjtimex(&t)
	return err == nil && state != unix.TIME_ERROR && t.Status&unix.STA_UNSYNC == 0
}
