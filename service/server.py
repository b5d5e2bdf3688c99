"""Settings of the production server, read by gunicorn: `gunicorn -c python:service.server 'service.app:create_app()'`.

Threads, so that a computation or a slow upload does not stop the others of its worker; the heartbeat file in memory, so
that a slow disk kills no worker; restarts after many requests, so that memory given to the allocator comes back.
"""

import os
from pathlib import Path

from gunicorn.config import KNOWN_SETTINGS

from service.config import config_from_environment, listen_address
from service.log_lines import log_settings

_config = config_from_environment()

bind = listen_address(_config)
workers = _config.workers
threads = _config.threads
worker_class = "gthread"
timeout = 60
graceful_timeout = 30
keepalive = 5
max_requests = 1000
max_requests_jitter = 100
logconfig_dict = log_settings(_config.log_level)
if Path("/dev/shm").is_dir() and os.access("/dev/shm", os.W_OK):
    worker_tmp_dir = "/dev/shm"
if any(setting.name == "control_socket_disable" for setting in KNOWN_SETTINGS):
    # it would be opened in the home directory, which a hardened container does not have
    control_socket_disable = True
