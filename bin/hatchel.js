#!/usr/bin/env node
import "../dist/commands/main.js";
