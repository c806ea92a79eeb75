#!/bin/sh
# need.sh PURPOSE PACKAGE... : installs the Debian packages that are missing, if
# it can. It never fails: what cannot be had is said, and what needs it is left
# out or skipped, loudly, by those who need it.
purpose=$1
shift
command -v dpkg-query >/dev/null 2>&1 || {
	echo "need: for $purpose install the equivalents of: $*" >&2
	exit 0
}
missing=
for p in "$@"; do
	dpkg-query -W -f '${db:Status-Status}' "$p" 2>/dev/null | grep -q '^installed' || missing="$missing $p"
done
[ -n "$missing" ] || exit 0
if [ "$(id -u)" = 0 ]; then
	sudo=
elif sudo -n true 2>/dev/null; then
	sudo="sudo -n"
else
	echo "need: for $purpose run: sudo apt-get install$missing" >&2
	exit 0
fi
echo "need: installing for $purpose:$missing" >&2
export DEBIAN_FRONTEND=noninteractive
$sudo apt-get update -qq >&2 || true
# One at a time if together they fail, so that one that is not to be had does
# not keep the others away.
$sudo apt-get install -y -qq --no-install-recommends $missing >/dev/null 2>&1 || for p in $missing; do
	$sudo apt-get install -y -qq --no-install-recommends "$p" >/dev/null 2>&1 || echo "need: $p could not be installed" >&2
done
exit 0
