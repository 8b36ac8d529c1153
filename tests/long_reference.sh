#!/usr/bin/env bash
# Sampled loops against a 50-digit simulation in Python (mpmath; SciPy as a second library).
# Where Python has no mpmath the package manager's is asked for by name.
set -u
here=$(cd "$(dirname "$0")" && pwd)
python=
for candidate in /usr/bin/python3 python3; do
  "$candidate" -c 'import mpmath' 2>/dev/null && { python=$candidate; break; }
done
if [ -z "$python" ]; then
  echo "long_reference: python3-mpmath (and python3-scipy) is missing; install it to run this test"
  echo "0 passed, 1 failed"
  exit 1
fi
exec "$python" "$here/long_reference.py" "${CASES:-300}"
