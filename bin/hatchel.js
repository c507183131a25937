#!/usr/bin/env node
import "../dist/command/main.js";
