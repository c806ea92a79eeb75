// Package soundtest runs a private PulseAudio with a null sink, for tests: what
// is played into the sink can be read back through PortAudio as from a card.
package soundtest

import (
	"fmt"
	"os"
	"os/exec"
	"path/filepath"
	"time"
)

// Pulse is a private PulseAudio server.
type Pulse struct {
	dir string
	cmd *exec.Cmd
}

// New prepares a server in a fresh directory and returns the environment that
// makes programs, PortAudio included, use it: its null sink is the default
// output and that sink's monitor the default input. The reason is a loud one
// for skipping where it cannot be done.
func New(dir string) (p *Pulse, env []string, skip string) {
	for _, prog := range []string{"pulseaudio", "pactl", "sox"} {
		if _, err := exec.LookPath(prog); err != nil {
			return nil, nil, fmt.Sprintf("SKIPPED: %s is not installed (Debian packages pulseaudio, pulseaudio-utils, sox): no sound card was tried", prog)
		}
	}
	plugin, _ := filepath.Glob("/usr/lib/*/alsa-lib/libasound_module_pcm_pulse.so")
	if len(plugin) == 0 {
		return nil, nil, "SKIPPED: ALSA's pulse plugin is not installed (Debian package libasound2-plugins): no sound card was tried"
	}
	conf := filepath.Join(dir, "asound.conf")
	text := "pcm.!default { type pulse }\nctl.!default { type pulse }\npcm.bench { type pulse device \"bench.monitor\" hint { show on description \"null sink\" } }\n"
	if err := os.WriteFile(conf, []byte("</usr/share/alsa/alsa.conf>\n"+text), 0o644); err != nil {
		return nil, nil, "SKIPPED: " + err.Error()
	}
	env = []string{
		"PULSE_SERVER=unix:" + filepath.Join(dir, "native"),
		"XDG_RUNTIME_DIR=" + dir, "HOME=" + dir, "PULSE_RUNTIME_PATH=" + dir,
		"PULSE_SINK=bench", "PULSE_SOURCE=bench.monitor",
		"ALSA_CONFIG_PATH=" + conf,
		"JACK_NO_START_SERVER=1",
	}
	return &Pulse{dir: dir}, env, ""
}

// Start runs the server and waits until it answers.
func (p *Pulse) Start() error {
	socket := filepath.Join(p.dir, "native")
	os.Remove(socket)
	p.cmd = exec.Command("pulseaudio", "-n", "--daemonize=no", "--exit-idle-time=-1", "--disallow-exit", "--use-pid-file=no", "--system=no",
		"-L", "module-null-sink sink_name=bench rate=48000 channels=2", "-L", "module-native-protocol-unix auth-anonymous=1 socket="+socket)
	log, err := os.Create(filepath.Join(p.dir, "pulse.log"))
	if err != nil {
		return err
	}
	defer log.Close()
	p.cmd.Stdout, p.cmd.Stderr = log, log
	if err := p.cmd.Start(); err != nil {
		return err
	}
	for range 100 {
		if exec.Command("pactl", "--server=unix:"+socket, "info").Run() == nil {
			return nil
		}
		time.Sleep(50 * time.Millisecond)
	}
	p.Kill()
	said, _ := os.ReadFile(log.Name())
	return fmt.Errorf("pulseaudio does not answer: %s", said)
}

// Kill ends the server at once, as a crash would.
func (p *Pulse) Kill() {
	if p.cmd != nil {
		p.cmd.Process.Kill()
		p.cmd.Wait()
		p.cmd = nil
	}
}

// Play plays a raw mono file of signed 16-bit samples at 48 kHz into the sink
// until the returned stop is called.
func (p *Pulse) Play(file string) (stop func(), err error) {
	cmd := exec.Command("pacat", "--server=unix:"+filepath.Join(p.dir, "native"), "--playback", "--device=bench", "--rate=48000", "--channels=1", "--format=s16le", "--raw", file)
	cmd.Env = append(os.Environ(), "HOME="+p.dir, "XDG_RUNTIME_DIR="+p.dir)
	if err := cmd.Start(); err != nil {
		return nil, err
	}
	return func() { cmd.Process.Kill(); cmd.Wait() }, nil
}
